#include "model/assess.hpp"

#include "tests/support/model_book.hpp"

#include <gtest/gtest.h>
#include <oneapi/tbb/global_control.h>

#include <algorithm>
#include <cmath>
#include <numeric>

namespace {

using model::assess;
using model::Contribution;
using model::Figures;
using model::LossKind;

double sum(Figures const& figures, double model::NameFigures::*figure) {
    double result = 0.0;
    for (auto const& name : figures.names) result += name.*figure;
    return result;
}

bool finite(Figures const& figures) {
    return std::ranges::all_of(figures.names, [](model::NameFigures const& name) {
        return std::isfinite(name.var_contribution) && std::isfinite(name.es_contribution) &&
               std::isfinite(name.var_contribution_error) &&
               std::isfinite(name.es_contribution_error);
    });
}

void expect_sums(Figures const& figures) {
    double const scale = 1e-12 * (std::abs(figures.totals.loss_quantile) + 1.0);
    EXPECT_NEAR(sum(figures, &model::NameFigures::var_contribution), figures.totals.credit_var,
                scale);
    EXPECT_NEAR(sum(figures, &model::NameFigures::es_contribution),
                figures.totals.expected_shortfall, scale);
}

model::Settings small_lender() {
    auto settings = tests::lender_settings();
    settings.simulation.scenarios = 20'000;
    return settings;
}

TEST(Contributions, SumToCreditVarAndToShortfall) {
    auto settings = small_lender();
    auto const names = tests::lender(300);
    expect_sums(assess(names, settings, 0));
    settings.loss_given_default_deviation = 0.25;
    settings.confidence = 0.9;
    expect_sums(assess(names, settings, 0));
}

TEST(Contributions, SumWhereTheBookGainsOnAverage) {
    auto settings = small_lender();
    settings.loss = LossKind::revaluation;
    settings.grade_values =
        Eigen::MatrixXd::Constant(7, 7, -0.2);  // a fifth is earned by not failing
    auto const figures = assess(tests::lender(300), settings, 0);
    EXPECT_LT(figures.totals.loss_quantile, 0.0);
    EXPECT_GT(figures.totals.credit_var, 0.0);
    EXPECT_NEAR(figures.plan.band_scale, 1.0, 0.011);
    EXPECT_TRUE(finite(figures));
    expect_sums(figures);
}

// With q at 0 there is no 1% of it to either side; the band is taken from the expected loss's side.
TEST(Contributions, SumWhereTheQuantileIsNothing) {
    auto settings = tests::one_index({0.0001}, 0.2);
    settings.simulation.scenarios = 5'000;
    tests::Names const names{tests::name(0, 100.0, 45.0), tests::name(0, 50.0, 20.0)};
    auto const figures = assess(names, settings, 0);
    EXPECT_EQ(figures.totals.loss_quantile, 0.0);
    EXPECT_EQ(figures.names[0].var_contribution, -figures.names[0].expected_loss);
    EXPECT_TRUE(finite(figures));
    expect_sums(figures);
}

TEST(Assessment, GivesTheSameBitsForAnyNumberOfThreads) {
    tbb::global_control const limit{tbb::global_control::max_allowed_parallelism, 7};
    auto const settings = small_lender();
    auto const names = tests::lender(300);
    auto const one = assess(names, settings, 1);
    auto const seven = assess(names, settings, 7);
    EXPECT_EQ(one.totals.expected_shortfall, seven.totals.expected_shortfall);
    for (std::size_t i = 0; i < names.size(); ++i) {
        EXPECT_EQ(one.names[i].es_contribution, seven.names[i].es_contribution);
        EXPECT_EQ(one.names[i].var_contribution_error, seven.names[i].var_contribution_error);
    }
}

// A default probability of 1% at 99.9%: the loss is all there is to lose, and that for certain.
TEST(OneName, HasItsWholeLossAtTheQuantile) {
    auto const settings = tests::one_index({0.01}, 0.2);
    auto const figures = assess(tests::Names{tests::name(0, 100.0, 45.0)}, settings, 0);
    EXPECT_EQ(figures.totals.loss_quantile, 45.0);
    EXPECT_EQ(figures.totals.loss_quantile_error, 0.0);
    EXPECT_DOUBLE_EQ(figures.totals.credit_var, 45.0 - 0.45);
    EXPECT_DOUBLE_EQ(figures.totals.expected_shortfall, 45.0);
    EXPECT_EQ(figures.names[0].var_contribution, figures.totals.credit_var);
    EXPECT_EQ(figures.names[0].var_contribution_error, 0.0);
    EXPECT_DOUBLE_EQ(figures.names[0].standalone_loss_deviation, 45.0 * std::sqrt(0.01 * 0.99));
}

TEST(NoName, HasNothingToLose) {
    auto const figures = assess(tests::Names{}, tests::one_index({0.01}, 0.2), 0);
    EXPECT_TRUE(figures.names.empty());
    EXPECT_EQ(figures.totals.expected_shortfall, 0.0);
    EXPECT_EQ(figures.totals.expected_shortfall_error, 0.0);
}

TEST(NameInDefault, IsLostAlreadyAndInNoOtherTotal) {
    auto const settings = tests::one_index({0.02}, 0.2);
    tests::Names const names{tests::name(0, 100.0, 45.0), tests::name(1, 1'000.0, 400.0)};
    auto const figures = assess(names, settings, 0);
    EXPECT_EQ(figures.totals.defaulted_loss, 400.0);
    EXPECT_DOUBLE_EQ(figures.totals.expected_loss, 0.9);
    EXPECT_EQ(figures.totals.loss_quantile, 45.0);
    EXPECT_EQ(figures.names[1].default_probability.value(), 1.0);
    EXPECT_EQ(figures.names[1].downgrade_probability.value(), 0.0);
    EXPECT_EQ(figures.names[1].expected_loss, 400.0);
    EXPECT_EQ(figures.names[1].standalone_loss_deviation, 0.0);
    EXPECT_EQ(figures.names[1].var_contribution, 0.0);
    EXPECT_EQ(figures.names[1].es_contribution, 0.0);
    EXPECT_EQ(figures.names[1].es_contribution_error, 0.0);
}

TEST(Book, ThatCannotLoseIsCertain) {
    auto const settings = tests::one_index({0.0}, 0.2);
    tests::Names const names{tests::name(0, 100.0, 45.0), tests::name(1, 10.0, 4.0),
                             tests::name(0, 0.0, 0.0)};
    auto const figures = assess(names, settings, 0);
    EXPECT_EQ(figures.totals.loss_quantile, 0.0);
    EXPECT_EQ(figures.totals.loss_quantile_error, 0.0);
    EXPECT_EQ(figures.totals.expected_shortfall_error, 0.0);
    for (auto const& name : figures.names) {
        EXPECT_EQ(name.es_contribution, 0.0);
        EXPECT_EQ(name.es_contribution_error, 0.0);
        EXPECT_EQ(name.var_contribution_error, 0.0);
    }
}

TEST(Deviation, OfBetaRecoveriesAddsTheirVarianceOnDefault) {
    auto settings = tests::one_index({0.04}, 0.2);
    settings.loss_given_default = *model::Fraction::from_fraction(0.5);
    settings.loss_given_default_deviation = 0.25;
    // By hand: a mean of 0.2 has the variance 0.2 x 0.8 x 0.25^2 / (0.5 x 0.5) = 0.04; so
    // E[L^2] = 0.04 x 100^2 x (0.2^2 + 0.04) = 32 and E[L] = 0.8.
    auto const figures =
        closed_form(*tests::name(0, 100.0, 20.0), settings, model::Migration{settings});
    EXPECT_NEAR(figures.standalone_loss_deviation, std::sqrt(32.0 - 0.64), 1e-12);
    auto const whole =
        closed_form(*tests::name(0, 100.0, 100.0), settings, model::Migration{settings});
    EXPECT_NEAR(whole.standalone_loss_deviation, 100.0 * std::sqrt(0.04 * 0.96), 1e-12);
}

TEST(Revaluation, WhereGradesAreWorthTheSameIsDefaultOnly) {
    auto settings = small_lender();
    auto const names = tests::lender(300);
    auto const defaults = assess(names, settings, 0);
    settings.loss = LossKind::revaluation;
    settings.grade_values = Eigen::MatrixXd::Zero(7, 7);
    auto const revalued = assess(names, settings, 0);
    for (std::size_t i = 0; i < names.size(); ++i) {
        EXPECT_DOUBLE_EQ(revalued.names[i].expected_loss, defaults.names[i].expected_loss);
        EXPECT_NEAR(revalued.names[i].standalone_loss_deviation /
                        defaults.names[i].standalone_loss_deviation,
                    1.0, 1e-12);
    }
    // Other draws of the same loss.
    auto const& a = defaults.totals;
    auto const& b = revalued.totals;
    EXPECT_NEAR(a.loss_quantile, b.loss_quantile,
                4.0 * std::hypot(a.loss_quantile_error, b.loss_quantile_error));
    EXPECT_NEAR(a.expected_shortfall, b.expected_shortfall,
                4.0 * std::hypot(a.expected_shortfall_error, b.expected_shortfall_error));
}

TEST(Revaluation, CountsWhatStayingIsWorth) {
    auto settings = tests::one_index({0.1}, 0.0);
    settings.loss = LossKind::revaluation;
    settings.grade_values = Eigen::MatrixXd::Constant(1, 1, -0.05);
    // By hand: 0.1 x 50 - 0.9 x 5 = 0.5; deviation (50 + 5) sqrt(0.1 x 0.9).
    auto const figures = assess(tests::Names{tests::name(0, 100.0, 50.0)}, settings, 0);
    EXPECT_NEAR(figures.names[0].expected_loss, 0.5, 1e-13);
    EXPECT_NEAR(figures.names[0].standalone_loss_deviation, 16.5, 1e-12);
    EXPECT_EQ(figures.totals.loss_quantile, 50.0);
}

// Thirty seeds against forty times the scenarios: what is off, in stated errors, has a root mean
// square near 1. The seeds are fixed; with others it would lie between 0.75 and 1.28 in 95 of a
// hundred cases if errors were stated exactly. They may be stated a little large, for the sake of
// what a sample does not show.
TEST(StatedErrors, AreWhatTheSeedsScatterBy) {
    auto settings = small_lender();
    auto const names = tests::lender(200);
    std::vector<std::uint32_t> sector;
    for (std::uint32_t i = 0; i < names.size(); ++i)
        if (names[i]->sector == "CONSTR") sector.push_back(i);
    ASSERT_GT(sector.size(), 10U);
    auto const part = [&](Figures const& figures, double model::NameFigures::*figure) {
        double of_sector = 0.0;
        for (auto const i : sector) of_sector += figures.names[i].*figure;
        return of_sector - 0.12 * sum(figures, figure);
    };
    constexpr auto es = &model::NameFigures::es_contribution;
    constexpr auto var = &model::NameFigures::var_contribution;

    settings.simulation = {.scenarios = 4'000'000, .seed = 1'000};
    auto const truth = assess(names, settings, 0);
    double quantile = 0.0;
    double shortfall = 0.0;
    double largest_name = 0.0;
    double largest_name_var = 0.0;
    double share_of_es = 0.0;
    double share_of_var = 0.0;
    constexpr int seeds = 30;
    for (int seed = 1; seed <= seeds; ++seed) {
        settings.simulation = {.scenarios = 100'000, .seed = static_cast<std::uint64_t>(seed)};
        auto const seen = assess(names, settings, 0);
        auto const off = [](double a, double b, double error) {
            return (a - b) * (a - b) / (error * error) / seeds;
        };
        quantile += off(seen.totals.loss_quantile, truth.totals.loss_quantile,
                        seen.totals.loss_quantile_error);
        shortfall += off(seen.totals.expected_shortfall, truth.totals.expected_shortfall,
                         seen.totals.expected_shortfall_error);
        largest_name += off(seen.names[0].es_contribution, truth.names[0].es_contribution,
                            seen.names[0].es_contribution_error);
        largest_name_var += off(seen.names[0].var_contribution, truth.names[0].var_contribution,
                                seen.names[0].var_contribution_error);
        share_of_es += off(part(seen, es), part(truth, es),
                           seen.contribution_error(Contribution::es, sector, 0.12));
        share_of_var += off(part(seen, var), part(truth, var),
                            seen.contribution_error(Contribution::var, sector, 0.12));
    }
    for (auto const& [what, square] : {std::pair{"quantile", quantile},
                                       {"shortfall", shortfall},
                                       {"name, es", largest_name},
                                       {"name, var", largest_name_var},
                                       {"share of es", share_of_es},
                                       {"share of var", share_of_var}}) {
        EXPECT_GT(std::sqrt(square), 0.6) << what;
        EXPECT_LT(std::sqrt(square), 1.4) << what;
    }
}

// A name that fails once in ten million years and would then cost more than all else: no scenario
// shows it, and its contribution comes out as nothing. That must not read as certainty.
TEST(StatedErrors, OfALossTooRareToBeDrawnAreNotNothing) {
    auto settings = tests::one_index({0.05, 1e-7}, 0.1);
    tests::Names names;
    for (int i = 0; i < 50; ++i) names.push_back(tests::name(0, 1.0, 1.0));
    names.push_back(tests::name(1, 1'000.0, 1'000.0));
    auto const figures = assess(names, settings, 0);
    EXPECT_EQ(figures.names.back().es_contribution, 0.0);
    // The truth: 1e-7 / 0.001 x 1,000 = 0.1.
    EXPECT_GT(3.0 * figures.names.back().es_contribution_error, 0.1);
    EXPECT_GT(3.0 * figures.totals.expected_shortfall_error, 0.1);
}

// The desk asks whether construction is over 12% of the shortfall. Construction and the whole swing
// together from seed to seed; the error of the difference is not that of its parts.
TEST(StatedErrors, OfAShareKnowThatPartAndWholeMoveTogether) {
    auto const settings = small_lender();
    auto const names = tests::lender(300);
    auto const figures = assess(names, settings, 0);
    std::vector<std::uint32_t> everyone(names.size());
    std::iota(everyone.begin(), everyone.end(), 0U);
    auto const error = [&](double share) {
        return figures.contribution_error(Contribution::es, everyone, share);
    };
    EXPECT_EQ(error(0.0), figures.totals.expected_shortfall_error);
    EXPECT_NEAR(error(0.5), 0.5 * error(0.0), 1e-9 * error(0.0));
    EXPECT_NEAR(error(1.0), 0.0, 1e-9 * error(0.0));
    EXPECT_NEAR(figures.contribution_error(Contribution::var, everyone, 0.0),
                figures.totals.loss_quantile_error, 1e-9 * figures.totals.loss_quantile_error);
}

// A thousand scenarios hold one at or above the 99.9% quantile: two ranks up there is nothing left
// to look at, and the error says so by what the book could lose.
TEST(StatedErrors, AreWideWhereTheSampleEnds) {
    auto settings = small_lender();
    settings.simulation.scenarios = 1'000;
    auto const figures = assess(tests::lender(300), settings, 0);
    EXPECT_GT(figures.totals.loss_quantile_error, 0.3 * figures.totals.loss_quantile);
}

}  // namespace
