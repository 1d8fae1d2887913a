#include "model/migration.hpp"

#include "model/dependence.hpp"
#include "tests/support/model_book.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>

namespace {

using model::Grade;
using model::Migration;

constexpr double infinity = std::numeric_limits<double>::infinity();

TEST(Migration, ThresholdsCutTheNormalDistributionIntoTheRow) {
    auto const settings = tests::lender_settings();
    Migration const migration{settings};
    for (std::uint8_t from = 0; from < 7; ++from) {
        auto const& cuts = migration.thresholds(Grade{from});
        ASSERT_EQ(cuts.size(), 7U);
        for (std::size_t j = 0; j < cuts.size(); ++j) {
            double const below = j == 0 ? 0.0 : model::normal_below(cuts[j - 1]);
            auto const state = static_cast<Eigen::Index>(7 - j);
            EXPECT_NEAR(model::normal_below(cuts[j]) - below, settings.transition(from, state),
                        1e-15);
        }
    }
}

TEST(Migration, BestGradeTakesWhatRoundingLeaves) {
    auto settings = tests::one_index({0.01, 0.05}, 0.2);
    settings.transition << 0.9, 0.0899, 0.01,  // sums to 0.9999
        0.1, 0.8501, 0.05;                     // sums to 1.0001
    Migration const migration{settings};
    EXPECT_NEAR(migration.matrix()(0, 0), 0.9001, 1e-15);
    EXPECT_NEAR(migration.matrix()(1, 0), 0.0999, 1e-15);
    EXPECT_EQ(migration.matrix()(0, 2), 0.01);
}

TEST(Migration, RowTooLongForItsBestGradeIsCutThereAndNotAtDefault) {
    auto settings = tests::one_index({0.01, 0.05}, 0.2);
    settings.transition << 0.9, 0.09, 0.01,  //
        0.0, 0.9502, 0.05;                   // sums to 1.0002 without the best grade
    Migration const migration{settings};
    EXPECT_EQ(migration.matrix()(1, 0), 0.0);
    EXPECT_NEAR(migration.matrix()(1, 1), 0.95, 1e-15);
    EXPECT_EQ(migration.matrix()(1, 2), 0.05);
    EXPECT_EQ(migration.thresholds(Grade{1})[1], infinity);
}

TEST(Migration, GradeThatNeverDefaultsHasItsThresholdAtMinusInfinity) {
    Migration const migration{tests::one_index({0.0}, 0.2)};
    EXPECT_EQ(migration.thresholds(Grade{0}).front(), -infinity);
    EXPECT_EQ(migration.default_probability(Grade{0}).value(), 0.0);
}

// Taken as 1 - cdf, a mass of 1e-14 above a cut keeps two digits; from its own side it keeps them
// all. Phi^-1(1e-14) = -7.650628092935, to twelve decimals by bisection at 50 digits.
TEST(Migration, FarTailsComeFromTheirOwnSide) {
    auto settings = tests::one_index({0.0, 0.0}, 0.2);
    settings.transition << 1.0 - 1e-14, 0.0, 1e-14,  //
        1e-14, 1.0 - 1e-14, 0.0;
    Migration const migration{settings};
    double const cut = -7.650628092935;
    EXPECT_NEAR(migration.thresholds(Grade{0})[0], cut, 1e-11);
    // What the best grade is left with is a difference from 1: exact to 1e-16, not to 1e-30.
    EXPECT_NEAR(migration.thresholds(Grade{1})[1], -cut, 2e-3);
}

TEST(Migration, HorizonOfTwoYearsIsTheMatrixTwiceWithDefaultAbsorbing) {
    auto settings = tests::one_index({0.01, 0.05}, 0.2);
    settings.transition << 0.9, 0.09, 0.01, 0.1, 0.85, 0.05;
    settings.horizon_years = 2;
    Migration const migration{settings};
    // By hand: default in the first year, or a move and then default.
    EXPECT_NEAR(migration.default_probability(Grade{0}).value(), 0.01 + 0.9 * 0.01 + 0.09 * 0.05,
                1e-15);
    EXPECT_NEAR(migration.matrix()(1, 0), 0.1 * 0.9 + 0.85 * 0.1, 1e-15);
    EXPECT_NEAR(migration.matrix().row(1).sum(), 1.0, 1e-15);
}

TEST(Migration, DowngradeIsTheMassBelowTodaysGradeDefaultIncluded) {
    Migration const migration{tests::lender_settings()};
    EXPECT_NEAR(migration.downgrade_probability(Grade{4}).value(), 0.0580 + 0.0100 + 0.0148, 1e-15);
    EXPECT_NEAR(migration.downgrade_probability(Grade{6}).value(), 0.12, 1e-15);
}

TEST(Migration, NameInDefaultStaysThere) {
    Migration const migration{tests::lender_settings()};
    EXPECT_EQ(migration.default_probability(Grade{7}).value(), 1.0);
    EXPECT_EQ(migration.downgrade_probability(Grade{7}).value(), 0.0);
}

}  // namespace
