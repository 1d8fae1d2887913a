#include "model/assess.hpp"
#include "model/judge.hpp"
#include "tests/support/lattice.hpp"
#include "tests/support/model_book.hpp"
#include "tests/support/random_book.hpp"

#include <fmt/format.h>
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <memory>
#include <random>

// The engine held against other routes to the same figures.

namespace {

using model::Engine;
using model::Figures;

void expect_same(Figures const& a, Figures const& b, double relative) {
    ASSERT_EQ(a.names.size(), b.names.size());
    double const scale = relative * std::abs(b.totals.expected_shortfall);
    EXPECT_NEAR(a.totals.loss_quantile, b.totals.loss_quantile, scale);
    EXPECT_NEAR(a.totals.expected_shortfall, b.totals.expected_shortfall, scale);
    for (std::size_t i = 0; i < a.names.size(); ++i) {
        auto const& one = a.names[i];
        auto const& other = b.names[i];
        EXPECT_NEAR(one.es_contribution, other.es_contribution,
                    relative * std::abs(other.es_contribution) + 1e-3 * scale);
        EXPECT_NEAR(one.var_contribution, other.var_contribution,
                    relative * std::abs(other.var_contribution) + 1e-3 * scale);
    }
}

// Exposures, grades, coming and going, large and small, in any order: what the engine makes of the
// differences is what it makes of the whole.
TEST(Update, EqualsAWholePassOnTheSamePlan) {
    for (int const kind : {0, 1, 2}) {
        auto changed = kind == 2 ? tests::revalued_lender_settings() : tests::lender_settings();
        if (kind == 1) changed.loss_given_default_deviation = 0.25;
        auto const settings = std::make_shared<model::Settings const>(changed);
        auto names = tests::lender(80);
        auto const reserve = names;
        Engine engine{0};
        auto const plan = engine.assess(names, settings).plan;
        std::mt19937 bits{static_cast<unsigned>(kind)};
        for (int round = 0; round < 6; ++round) {
            auto const changes = 1 + bits() % 3;
            for (unsigned c = 0; c < changes; ++c) {
                auto const i = bits() % names.size();
                auto name = *names[i];
                switch (bits() % 4) {
                    case 0:
                        name.exposure_at_default =
                            *model::Money::from_units(name.exposure_at_default.units() * 1.25);
                        name.loss_at_default *= 1.25;
                        break;
                    case 1:
                        name.grade.rank = static_cast<std::uint8_t>(bits() % 8);
                        break;
                    case 2:
                        names.erase(names.begin() + static_cast<std::ptrdiff_t>(i));
                        continue;
                    default:
                        name.loss_at_default = 0.0;
                        name.exposure_at_default = {};
                }
                names[i] = std::make_shared<model::Name const>(std::move(name));
            }
            if (round == 3) names = reserve;
            auto const updated = engine.assess(names, settings);
            if (updated.plan != plan) break;  // it no longer served
            expect_same(updated, Engine(0, plan).assess(names, settings), 1e-9);
        }
    }
}

// Ten names on a lattice, by convolution name by name given the index.
TEST(LatticeBook, IsWhatRecursionSays) {
    auto settings = tests::one_index({0.004, 0.02, 0.1}, 0.3);
    tests::Names names;
    for (int i = 0; i < 30; ++i) {
        double const lost = 1.0 + (i * 7) % 19;
        names.push_back(tests::name(i % 3, lost, lost));
    }
    for (double const confidence : {0.9, 0.99, 0.999}) {
        settings.confidence = confidence;
        auto const figures = assess(names, settings, 0);
        auto const exact = tests::lattice(names, settings);
        EXPECT_EQ(figures.plan.inversion, model::Inversion::lattice);
        EXPECT_EQ(figures.totals.loss_quantile, exact.loss_quantile);
        EXPECT_NEAR(figures.totals.expected_shortfall / exact.expected_shortfall, 1.0, 1e-9);
        for (std::size_t i = 0; i < names.size(); ++i) {
            EXPECT_NEAR(figures.names[i].es_contribution / exact.es_contribution[i], 1.0, 1e-6);
            EXPECT_NEAR(figures.names[i].var_contribution / exact.var_contribution[i], 1.0, 1e-6);
        }
    }
}

// Books nobody would think of, against the judge.
class RandomBook : public testing::TestWithParam<std::uint64_t> {};

TEST_P(RandomBook, IsJudgedAlike) {
    std::uint64_t const seed = GetParam();
    auto const book = tests::random_book(seed);
    SCOPED_TRACE(book.describe);
    auto const figures = assess(book.names, book.settings, 0);
    auto const judged = judge(
        book.names, book.settings,
        {.scenarios = 20'000, .seed = seed + 1'000, .mode = model::JudgePlan::Mode::shifted}, 0);
    auto const& a = figures.totals;
    auto const& b = judged.totals;
    double const rounding = 1e-9 * std::abs(a.expected_shortfall);
    EXPECT_NEAR(a.loss_quantile, b.loss_quantile,
                5.0 * std::hypot(a.loss_quantile_error, b.loss_quantile_error) + rounding);
    EXPECT_NEAR(
        a.expected_shortfall, b.expected_shortfall,
        5.0 * std::hypot(a.expected_shortfall_error, b.expected_shortfall_error) + rounding);
    EXPECT_NEAR(a.expected_loss, b.expected_loss, rounding);
    double es = 0.0;
    double var = 0.0;
    for (auto const& name : figures.names) {
        es += name.es_contribution;
        var += name.var_contribution;
    }
    EXPECT_NEAR(es, a.expected_shortfall, 1e-6 * std::abs(a.expected_shortfall));
    EXPECT_NEAR(var, a.credit_var, 1e-6 * std::abs(a.expected_shortfall));
}

INSTANTIATE_TEST_SUITE_P(Seed, RandomBook, testing::Range<std::uint64_t>(28, 48),
                         testing::PrintToStringParamName());

}  // namespace
