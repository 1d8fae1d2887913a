#include "model/law.hpp"

#include "tests/support/model_book.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

namespace {

using model::Law;

// The largest distance, anywhere between the ends of the table, of a tabulated default probability
// from the formula.
double worst(double asset_correlation) {
    auto const settings = tests::one_index({0.0001, 0.01, 0.3}, asset_correlation);
    tests::Names const names{tests::name(0, 1.0, 1.0)};
    model::Cells const cells{names, settings};
    Law const law{cells, Law::Of::moments};
    double worst = 0.0;
    for (double index = -9.0; index <= 9.0; index += 0.00137)
        for (std::uint32_t kind = 0; kind < cells.kinds().size(); ++kind) {
            double const cut = cells.migration().thresholds({cells.kinds()[kind].grade}).front();
            worst =
                std::max(worst, std::abs(law.at(law.place(index), 0, kind) -
                                         model::probability_below(cut, asset_correlation, index)));
        }
    return worst;
}

TEST(Law, IsAsNearTheFormulaAsItSays) {
    EXPECT_LT(worst(0.0), 1e-15);
    EXPECT_LT(worst(0.2), 1e-9);
    EXPECT_LT(worst(0.5), 1e-9);
    EXPECT_LT(worst(0.8), 1e-8);
    EXPECT_LT(worst(0.99), 1e-6);
}

TEST(Law, OfStatesSumsToOne) {
    auto settings = tests::lender_settings();
    settings.loss = model::LossKind::revaluation;
    settings.grade_values = Eigen::MatrixXd::Zero(7, 7);
    model::Cells const cells{tests::lender(50), settings};
    Law const law{cells, Law::Of::states};
    for (double const index : {-7.3, -1.01, 0.0, 2.5})
        for (std::uint32_t kind = 0; kind < cells.kinds().size(); ++kind) {
            double sum = 0.0;
            for (std::size_t state = 0; state < law.functions(); ++state)
                sum += law.at(law.place(index), state, kind);
            EXPECT_NEAR(sum, 1.0, 1e-14);
        }
}

}  // namespace
