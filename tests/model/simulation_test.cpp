#include "model/simulation.hpp"

#include "tests/support/model_book.hpp"
#include "tests/support/quadrature.hpp"

#include <Random123/philox.h>
#include <gtest/gtest.h>
#include <oneapi/tbb/global_control.h>

#include <algorithm>
#include <cmath>
#include <functional>
#include <limits>
#include <numeric>
#include <random>
#include <utility>

namespace {

using model::LossKind;
using model::Migration;
using model::Simulation;

struct Moments {
    double mean = 0.0;
    double deviation = 0.0;
};

Moments moments(std::vector<double> const& values) {
    auto const count = static_cast<double>(values.size());
    double const mean = std::accumulate(values.begin(), values.end(), 0.0) / count;
    double squares = 0.0;
    for (double const value : values) squares += (value - mean) * (value - mean);
    return {mean, std::sqrt(squares / count)};
}

// Another route: every name draws its asset return and is put beside its thresholds.
std::vector<double> naive_losses(tests::Names const& names, model::Settings const& settings,
                                 std::size_t scenarios) {
    Migration const migration{settings};
    auto const f = model::factor(settings.indices.correlation);
    auto const grades = static_cast<Eigen::Index>(settings.grades.size());
    std::mt19937_64 bits{7};
    std::normal_distribution<double> normal;
    std::vector<double> losses(scenarios, 0.0);
    Eigen::VectorXd z(f.cols());
    for (double& loss : losses) {
        for (double& factor : z) factor = normal(bits);
        Eigen::VectorXd const indices = f * z;
        for (auto const& name : names) {
            if (name->grade.rank == grades) continue;
            auto const b = model::blend(settings, name->sector, name->country);
            double const index =
                b.first_weight * indices[b.first] + b.second_weight * indices[b.second];
            double const rho =
                name->asset_correlation.value_or(settings.asset_correlation[name->grade.rank]);
            double const x = std::sqrt(rho) * index + std::sqrt(1.0 - rho) * normal(bits);
            auto const& cuts = migration.thresholds(name->grade);
            auto const state =
                grades - (std::upper_bound(cuts.begin(), cuts.end(), x) - cuts.begin());
            if (state == grades)
                loss += name->loss_at_default;
            else if (settings.loss == LossKind::revaluation)
                loss += name->exposure_at_default.units() *
                        settings.grade_values(name->grade.rank, state);
        }
    }
    return losses;
}

TEST(Philox, GivesItsPublishedFirstWords) {
    auto const words = r123::Philox4x32{}({{0, 0, 0, 0}}, {{0, 0}});
    EXPECT_EQ(words[0], 0x6627e8d5U);
    EXPECT_EQ(words[1], 0xe169c58dU);
    EXPECT_EQ(words[2], 0xbc57ac4cU);
    EXPECT_EQ(words[3], 0x9b00dbd8U);
}

TEST(Simulation, GivesTheSameBitsForAnyNumberOfThreads) {
    tbb::global_control const seven{tbb::global_control::max_allowed_parallelism, 7};
    for (auto settings : {tests::lender_settings(), tests::revalued_lender_settings()}) {
        settings.loss_given_default_deviation = 0.2;
        auto const names = tests::lender(400);
        Migration const migration{settings};
        Simulation const simulation{names, settings, migration};
        auto const alone = simulation.losses(0, 3'000, 1);
        EXPECT_EQ(alone, simulation.losses(0, 3'000, 2));
        EXPECT_EQ(alone, simulation.losses(0, 3'000, 7));
    }
}

TEST(Simulation, SplitAnywhereGivesTheSameScenarios) {
    auto const settings = tests::lender_settings();
    auto const names = tests::lender(400);
    Migration const migration{settings};
    Simulation const simulation{names, settings, migration};
    auto split = simulation.losses(0, 301, 2);
    auto const rest = simulation.losses(301, 699, 2);
    split.insert(split.end(), rest.begin(), rest.end());
    EXPECT_EQ(split, simulation.losses(0, 1'000, 2));
}

TEST(Simulation, OtherSeedsGiveOtherScenarios) {
    auto settings = tests::lender_settings();
    auto const names = tests::lender(400);
    Migration const migration{settings};
    auto const one = Simulation{names, settings, migration}.losses(0, 100, 1);
    settings.simulation.seed = std::uint64_t{1} << 32U;
    EXPECT_NE(one, (Simulation{names, settings, migration}.losses(0, 100, 1)));
}

TEST(Simulation, MovesOfAScenarioAddUpToItsLossAndNameEachNameOnce) {
    auto settings = tests::revalued_lender_settings();
    settings.loss_given_default_deviation = 0.2;
    auto const names = tests::lender(400);
    Migration const migration{settings};
    Simulation const simulation{names, settings, migration};
    auto const losses = simulation.losses(0, 200, 1);
    std::vector<std::uint64_t> scenarios(200);
    std::iota(scenarios.begin(), scenarios.end(), 0U);
    auto const moves = simulation.moves(scenarios, 2);
    double const base = std::accumulate(simulation.base().begin(), simulation.base().end(), 0.0);
    for (std::size_t s = 0; s < scenarios.size(); ++s) {
        double loss = base;
        std::vector<bool> seen(names.size(), false);
        for (auto const& [name, amount] : moves[s]) {
            EXPECT_FALSE(seen[name]);
            seen[name] = true;
            EXPECT_LE(std::abs(amount), simulation.largest()[name] * (1.0 + 1e-12));
            loss += amount;
        }
        EXPECT_NEAR(loss, losses[s], 1e-14 * 400 * std::abs(base));
    }
}

TEST(Simulation, DrawsTheLossesThatNamesAskedOneByOneDo) {
    for (auto const& settings : {tests::lender_settings(), tests::revalued_lender_settings()}) {
        auto names = tests::lender(150);
        auto own = *names[0];
        own.asset_correlation = 0.7;
        names[0] = std::make_shared<model::Name const>(own);
        auto naive = naive_losses(names, settings, 20'000);
        Migration const migration{settings};
        auto judge = Simulation{names, settings, migration}.losses(0, 80'000, 0);

        auto const [mean, deviation] = moments(naive);
        auto const [judge_mean, judge_deviation] = moments(judge);
        double const error = deviation * std::sqrt(1.0 / 20'000 + 1.0 / 80'000);
        EXPECT_NEAR(judge_mean, mean, 4.0 * error);
        // Kolmogorov & Smirnov: the distance of the two distributions times the root below exceeds
        // 1.95 once in a thousand.
        std::ranges::sort(naive);
        std::ranges::sort(judge);
        double distance = 0.0;
        for (double const x : naive) {
            auto const share = [x](std::vector<double> const& sorted) {
                auto const below = std::upper_bound(sorted.begin(), sorted.end(), x + 1e-3);
                return static_cast<double>(below - sorted.begin()) /
                       static_cast<double>(sorted.size());
            };
            distance = std::max(distance, std::abs(share(naive) - share(judge)));
        }
        EXPECT_LT(distance * std::sqrt(20'000.0 * 80'000.0 / 100'000.0), 1.95);
    }
}

TEST(Simulation, TakesNamesToEveryGradeAsOftenAsTheMatrixSays) {
    auto settings = tests::revalued_lender_settings();
    settings.grade_values.diagonal().setZero();
    for (std::uint8_t from = 0; from < 7; ++from) {
        tests::Names const names{tests::name(from, 100.0, 50.0)};
        Migration const migration{settings};
        std::size_t const scenarios = 100'000;
        auto const losses = Simulation{names, settings, migration}.losses(0, scenarios, 0);
        for (int to = 0; to <= 7; ++to) {
            double const expected = migration.matrix()(from, to);
            double const loss = to == 7      ? 50.0
                                : to == from ? 0.0
                                             : 100.0 * settings.grade_values(from, to);
            double const seen =
                static_cast<double>(std::ranges::count_if(
                    losses, [loss](double x) { return std::abs(x - loss) < 1e-6; })) /
                scenarios;
            double const error = std::sqrt(expected * (1.0 - expected) / scenarios);
            EXPECT_NEAR(seen, expected, 4.0 * error) << int{from} << " to " << to;
        }
    }
}

// The probability proper is worked out only where the index leaves it open; names that are likely
// to go in bad years and hit many times over are where a slip would show.
TEST(Simulation, DefaultsTogetherAsOftenAsTheCorrelationSays) {
    for (double const p : {0.001, 0.3, 0.9, 1.0}) {
        for (double const rho : {0.0, 0.3, 0.99}) {
            auto const settings = tests::one_index({p}, rho);
            Migration const migration{settings};
            double const cut = migration.thresholds(model::Grade{0}).front();
            double const both = tests::over_normal([&](double index) {
                double const conditional = model::probability_below(cut, rho, index);
                return conditional * conditional;
            });
            tests::Names const names{tests::name(0, 1.0, 1.0), tests::name(0, 1.0, 1.0)};
            std::size_t const scenarios = 100'000;
            auto const losses = Simulation{names, settings, migration}.losses(0, scenarios, 0);
            double const seen = static_cast<double>(std::ranges::count(losses, 2.0)) / scenarios;
            EXPECT_NEAR(seen, both, 4.0 * std::sqrt(both * (1.0 - both) / scenarios) + 1e-12)
                << p << ' ' << rho;
        }
    }
}

TEST(Simulation, NeverTouchesAGradeThatCannotDefaultNorANameInDefault) {
    auto const settings = tests::one_index({0.0, 1.0}, 0.9);
    tests::Names const names{tests::name(0, 5.0, 5.0), tests::name(1, 2.0, 2.0),
                             tests::name(2, 9.0, 9.0)};
    Migration const migration{settings};
    Simulation const simulation{names, settings, migration};
    EXPECT_EQ(simulation.losses(0, 1'000, 1), std::vector<double>(1'000, 2.0));
    EXPECT_EQ(simulation.largest(), (std::vector<double>{0.0, 2.0, 0.0}));
}

// Exposures of 0.1 and 0.3 have no finite binary fraction: added up in different orders they used
// to give losses that differ in the last bit, and an atom fell apart.
TEST(Simulation, EqualLossesAreEqualInWhateverOrderTheyAddUp) {
    auto const settings = tests::one_index({0.3}, 0.1);
    tests::Names names;
    for (int i = 0; i < 12; ++i) names.push_back(tests::name(0, 1.0, i % 2 == 0 ? 0.1 : 0.3));
    Migration const migration{settings};
    auto losses = Simulation{names, settings, migration}.losses(0, 50'000, 0);
    std::ranges::sort(losses);
    losses.erase(std::unique(losses.begin(), losses.end()), losses.end());
    EXPECT_EQ(losses.size(), 25U);  // 0, 0.1, ... 2.4
}

// ---- factors drawn from elsewhere ----

model::FactorLaw shifted_law(Eigen::Index factors) {
    Eigen::MatrixXd means = Eigen::MatrixXd::Zero(factors, 3);
    means(factors - 1, 1) = 2.0;
    means(0, 2) = -1.5;
    return {means, {2, 9, 5}};
}

TEST(FactorLaw, ThatIsPlainWeighsNothingAnew) {
    model::FactorLaw const law;
    Eigen::VectorXd factors = Eigen::VectorXd::Constant(3, 1.5);
    law.shift(factors, 7);
    EXPECT_EQ(factors, Eigen::VectorXd::Constant(3, 1.5));
    EXPECT_EQ(law.weight(factors), 1.0);
}

TEST(FactorLaw, WeighsByTheRatioOfTheDensities) {
    auto const law = shifted_law(2);
    Eigen::Vector2d const z{0.3, 1.2};
    auto const density = [&z](double a, double b) {
        return std::exp(-0.5 * (std::pow(z[0] - a, 2) + std::pow(z[1] - b, 2)));
    };
    double const mixed =
        (2.0 * density(0.0, 0.0) + 9.0 * density(0.0, 2.0) + 5.0 * density(-1.5, 0.0)) / 16.0;
    EXPECT_NEAR(law.weight(z), density(0.0, 0.0) / mixed, 1e-14);
    EXPECT_LE(law.weight(Eigen::Vector2d{9.0, -9.0}), 8.0);
}

TEST(FactorLaw, GivesEveryComponentItsShareOfSixteenScenarios) {
    auto const law = shifted_law(2);
    int at_zero = 0;
    int second = 0;
    for (std::uint64_t s = 160; s < 176; ++s) {
        Eigen::VectorXd factors = Eigen::VectorXd::Zero(2);
        law.shift(factors, s);
        at_zero += factors.isZero() ? 1 : 0;
        second += factors[1] == 2.0 ? 1 : 0;
    }
    EXPECT_EQ(at_zero, 2);
    EXPECT_EQ(second, 9);
}

// The weights' mean is 1, and weighted losses have the mean and the square they have unweighted.
TEST(Simulation, WeighsShiftedScenariosSoThatNothingIsBiased) {
    for (auto const& settings : {tests::lender_settings(), tests::revalued_lender_settings()}) {
        auto const names = tests::lender(150);
        Migration const migration{settings};
        Simulation const simulation{names, settings, migration, 3};
        auto const law = shifted_law(model::factor(settings.indices.correlation).cols());
        std::size_t const scenarios = 64'000;
        auto const plain = simulation.sample({}, 0, scenarios, 0);
        auto const shifted = simulation.sample(law, scenarios, scenarios, 0);
        for (auto const& of : std::vector<std::function<double(double)>>{
                 [](double) { return 1.0; }, [](double loss) { return loss / 1e7; },
                 [](double loss) { return loss * loss / 1e14; }}) {
            std::vector<double> expected(scenarios);
            std::vector<double> weighted(scenarios);
            for (std::size_t s = 0; s < scenarios; ++s) {
                expected[s] = of(plain.loss[s]);
                weighted[s] = shifted.weight[s] * of(shifted.loss[s]);
            }
            auto const [mean, deviation] = moments(expected);
            auto const [weighted_mean, weighted_deviation] = moments(weighted);
            EXPECT_NEAR(weighted_mean, mean,
                        4.0 * std::hypot(deviation, weighted_deviation) /
                            std::sqrt(static_cast<double>(scenarios)));
        }
    }
}

TEST(Simulation, DrawsTheSameScenariosAgain) {
    auto const settings = tests::lender_settings();
    auto const names = tests::lender(200);
    Migration const migration{settings};
    Simulation const simulation{names, settings, migration, 5};
    auto const f = model::factor(settings.indices.correlation);
    auto const law = shifted_law(f.cols());
    auto const sample = simulation.sample(law, 0, 100, 2);
    std::vector<std::uint64_t> const scenarios{3, 64, 99};
    simulation.visit(law, scenarios, [&](std::size_t k, auto const& moves, auto const& indices) {
        double loss = 0.0;
        for (auto const& [name, amount] : moves) loss += amount;
        EXPECT_NEAR(loss, sample.loss[scenarios[k]], 1e-6);
        auto const factors = simulation.factors(law, scenarios[k]);
        EXPECT_EQ(law.weight(factors), sample.weight[scenarios[k]]);
        EXPECT_TRUE(indices.isApprox(f * factors));
    });
}

// The mean of what is expected given the indices is the mean of what is drawn, within any bounds.
TEST(Simulation, ExpectsOfAMoveWhatIsDrawnOfIt) {
    for (double const d : {0.0, 0.3}) {
        for (auto settings : {tests::lender_settings(), tests::revalued_lender_settings()}) {
            settings.loss_given_default_deviation = d;
            tests::Names const names{tests::name(5, 100.0, 45.0)};
            Migration const migration{settings};
            Simulation const simulation{names, settings, migration, 9};
            std::vector<std::uint64_t> scenarios(50'000);
            std::iota(scenarios.begin(), scenarios.end(), 0U);
            constexpr double infinity = std::numeric_limits<double>::infinity();
            for (auto const& [low, high] : {std::pair{-infinity, infinity},
                                            {0.5, 1.5},
                                            {-infinity, 0.0},
                                            {20.0, 45.2 + 1e-9},
                                            {45.2 + 1e-9, 70.0},
                                            {101.0, infinity}}) {
                std::vector<double> differences(scenarios.size());
                simulation.visit({}, scenarios,
                                 [&, low = low, high = high](std::size_t k, auto const& moves,
                                                             auto const& indices) {
                                     differences[k] =
                                         -simulation.expected_move(0, indices, low, high);
                                     for (auto const& [name, amount] : moves)
                                         if (low <= amount && amount <= high)
                                             differences[k] += amount;
                                 });
                auto const [mean, deviation] = moments(differences);
                EXPECT_NEAR(
                    mean, 0.0,
                    4.0 * deviation / std::sqrt(static_cast<double>(scenarios.size())) + 1e-12)
                    << low << ' ' << high << ' ' << d;
            }
        }
    }
}

TEST(Recovery, HasTheMeanAndDeviationOfModelYaml) {
    auto settings = tests::one_index({0.5}, 0.0);
    settings.loss_given_default = *model::Fraction::from_fraction(0.45);
    for (double const d : {0.01, 0.25, 0.4974}) {  // the last is all but a coin: d^2 -> m (1 - m)
        settings.loss_given_default_deviation = d;
        tests::Names const names{tests::name(0, 100.0, 45.0)};
        Migration const migration{settings};
        std::vector<double> defaults;
        std::vector<std::uint64_t> scenarios(100'000);
        std::iota(scenarios.begin(), scenarios.end(), 0U);
        for (auto const& moves : Simulation{names, settings, migration}.moves(scenarios, 0))
            for (auto const& move : moves) defaults.push_back(move.amount);
        auto const [mean, deviation] = moments(defaults);
        auto const count = static_cast<double>(defaults.size());
        ASSERT_GT(count, 40'000.0);
        EXPECT_NEAR(mean, 45.0, 4.0 * 100.0 * d / std::sqrt(count));
        double fourth = 0.0;
        for (double const loss : defaults) {
            EXPECT_GE(loss, 0.0);
            EXPECT_LE(loss, 100.0);
            fourth += std::pow((loss - mean) / deviation, 4) / count;
        }
        EXPECT_NEAR(deviation / (100.0 * d), 1.0, 4.0 * std::sqrt((fourth - 1.0) / (4.0 * count)));
    }
}

TEST(Recovery, IsNotDrawnWhereNothingOrAllIsLost) {
    auto settings = tests::one_index({1.0}, 0.0);
    settings.loss_given_default_deviation = 0.25;
    tests::Names const names{tests::name(0, 100.0, 100.0), tests::name(0, 100.0, 0.0)};
    Migration const migration{settings};
    Simulation const simulation{names, settings, migration};
    EXPECT_EQ(simulation.losses(0, 1'000, 1), std::vector<double>(1'000, 100.0));
}

}  // namespace
