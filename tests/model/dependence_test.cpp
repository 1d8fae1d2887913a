#include "model/dependence.hpp"

#include "model/migration.hpp"
#include "tests/support/model_book.hpp"
#include "tests/support/quadrature.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <stdexcept>

namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();

TEST(Factor, TimesItselfIsTheCorrelation) {
    auto const& correlation = tests::lender_settings().indices.correlation;
    Eigen::MatrixXd const f = model::factor(correlation);
    EXPECT_LT((f * f.transpose() - correlation).cwiseAbs().maxCoeff(), 1e-14);
}

TEST(Factor, OfTwoIndicesThatAreOneHasOneColumn) {
    Eigen::MatrixXd const f = model::factor(Eigen::MatrixXd::Ones(2, 2));
    ASSERT_EQ(f.cols(), 1);
    EXPECT_NEAR(f(0, 0) * f(1, 0), 1.0, 1e-14);
}

// Three indices: two of them close to the third cannot be far from one another. The eigenvalues of
// this matrix are 1.9, 1.9 and -0.8 (their sum is 3, their product -2.888).
TEST(SmallestEigenvalue, IsNegativeWhereCorrelationsContradict) {
    Eigen::Matrix3d correlation;
    correlation << 1.0, 0.9, 0.9, 0.9, 1.0, -0.9, 0.9, -0.9, 1.0;
    EXPECT_NEAR(model::smallest_eigenvalue(correlation), -0.8, 1e-14);
}

TEST(Blend, HasUnitVariance) {
    auto const settings = tests::lender_settings();
    auto const b = model::blend(settings, "ENERGY", "NL");
    double const correlation = settings.indices.correlation(b.first, b.second);
    EXPECT_EQ(settings.indices.names[b.first], "sector:ENERGY");
    EXPECT_EQ(settings.indices.names[b.second], "country:NL");
    EXPECT_NEAR(b.first_weight / b.second_weight, 0.8 / 0.2, 1e-14);
    EXPECT_NEAR(b.first_weight * b.first_weight + b.second_weight * b.second_weight +
                    2.0 * b.first_weight * b.second_weight * correlation,
                1.0, 1e-14);
}

TEST(Blend, ServesCodesWithoutAnIndexByOthers) {
    auto const settings = tests::lender_settings();
    auto const b = model::blend(settings, "unknown", "NL");
    EXPECT_EQ(settings.indices.names[b.first], "sector:others");
    EXPECT_TRUE(model::has_index(settings, "ENERGY", "NL"));
    EXPECT_FALSE(model::has_index(settings, "unknown", "NL"));
    EXPECT_FALSE(model::has_index(settings, "ENERGY", "unknown"));
}

TEST(Blend, OfOneKindDoesNotAskForTheOther) {
    auto settings = tests::lender_settings();
    settings.index_weights = {.country = 0.5};
    auto const b = model::blend(settings, "unknown", "NL");
    EXPECT_EQ(settings.indices.names[b.first], "country:NL");
    EXPECT_EQ(b.first, b.second);
    EXPECT_DOUBLE_EQ(b.first_weight + b.second_weight, 1.0);
    EXPECT_TRUE(model::has_index(settings, "unknown", "NL"));
}

TEST(Blend, OfIndicesThatCancelOutIsRefused) {
    auto settings = tests::lender_settings();
    settings.indices = {.names = {"sector:others", "country:others"},
                        .correlation = Eigen::MatrixXd{{1.0, -1.0}, {-1.0, 1.0}}};
    settings.index_weights = {.sector = 0.5, .country = 0.5};
    EXPECT_THROW((void)model::blend(settings, "RETAIL", "DE"), std::domain_error);
}

// Within the rounding of the quadrature's 1,153 terms.
TEST(ProbabilityBelow, AveragesBackToTheUnconditionalOne) {
    for (double const p : {1e-6, 0.0005, 0.02, 0.5, 0.97}) {
        auto const settings = tests::one_index({p}, 0.2);
        double const cut = model::Migration{settings}.thresholds(model::Grade{0}).front();
        for (double const rho : {0.0, 0.2, 0.6})
            EXPECT_NEAR(tests::over_normal([&](double index) {
                            return model::probability_below(cut, rho, index);
                        }) / p,
                        1.0, 1e-12);
    }
}

TEST(ProbabilityBelow, IsCertainAtInfiniteCuts) {
    EXPECT_EQ(model::probability_below(-infinity, 0.3, -8.0), 0.0);
    EXPECT_EQ(model::probability_below(infinity, 0.3, 8.0), 1.0);
}

TEST(ProbabilityBelow, RisesAsTheIndexFalls) {
    EXPECT_LT(model::probability_below(-2.0, 0.2, 1.0), model::probability_below(-2.0, 0.2, 0.0));
    EXPECT_LT(model::probability_below(-2.0, 0.2, 0.0), model::probability_below(-2.0, 0.2, -1.0));
}

}  // namespace
