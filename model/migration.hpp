#pragma once

#include "model/settings.hpp"
#include "model/units.hpp"

#include <Eigen/Core>

#include <vector>

namespace model {

// Where a counterparty may stand at the horizon, and the asset returns that take it there.
//
//     P         grades x (grades + default)   fractions, rows sum to 1: the one-year matrix to the
//                                             power of the horizon, default absorbing
//     cut(g,k)  = Phi^-1( sum of P(g, j) over the states j worse than k )
//               states worst first: cut(g, k) separates state k from all worse ones; -inf and +inf
//               where the mass is 0 or 1
//
// Cumulated from default upwards; the best grade takes what rounding leaves.
// Source: Gupton, Finger & Bhatia (1997), technical document, on Merton (1974), On
// the pricing of corporate debt, Journal of Finance 29(2).
class Migration {
public:
    explicit Migration(Settings const& settings);

    // Grades and default: `default` has probability 1 of default and nothing else.
    [[nodiscard]] Probability default_probability(Grade grade) const;
    // The mass strictly below today's grade, default included; 0 in default.
    [[nodiscard]] Probability downgrade_probability(Grade grade) const;

    [[nodiscard]] Eigen::MatrixXd const& matrix() const { return matrix_; }

    // Asset-return thresholds of a rated grade, worst first: element j is the upper edge of the
    // (j+1)-th worst state; element 0 is the default threshold. As many as there are rated grades.
    [[nodiscard]] std::vector<double> const& thresholds(Grade grade) const {
        return thresholds_[grade.rank];
    }

private:
    Eigen::MatrixXd matrix_;
    std::vector<std::vector<double>> thresholds_;
};

}  // namespace model
