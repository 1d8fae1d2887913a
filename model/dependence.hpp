#pragma once

#include "model/settings.hpp"

#include <Eigen/Core>

#include <cstdint>
#include <string_view>

// What counterparties have in common: the systematic indices their asset returns lean on.

namespace model {

// The smallest eigenvalue of a symmetric matrix. A correlation matrix has none below 0 but for
// rounding.
double smallest_eigenvalue(Eigen::MatrixXd const& symmetric);

// Whether the codes have indices of their own, of each kind the weights use, rather than `others`.
bool has_index(Settings const& settings, std::string_view sector, std::string_view country);

// Phi, accurate in the lower tail.
double normal_below(double x);

// The probability of an asset return below a cut once the systematic index is known.
//
//     P(X < cut | I) = Phi((cut - sqrt(rho) I) / sqrt(1 - rho))
//
//     cut                     standard normal; -inf and +inf give 0 and 1
//     asset_correlation rho   in [0, 0.99]
//     index             I     standard normal; negative is a bad year
//     returns                 fraction in [0, 1]
//
// Source: Vasicek (2002), Loan portfolio value, Risk 15(12).
double probability_below(double cut, double asset_correlation, double index);

// A counterparty's systematic index: two of the given ones, weighted to unit variance.
//
//     I = first_weight I_first + second_weight I_second
struct Blend {
    std::uint32_t first = 0;   // rows of the correlation matrix
    std::uint32_t second = 0;  // equal to `first` where one kind alone is used
    double first_weight = 1.0;
    double second_weight = 0.0;
};

// The blend of a sector's and a country's index; of `others` for codes without one. Throws
// std::domain_error where the two cancel out, so that no variance is left to rescale.
Blend blend(Settings const& settings, std::string_view sector, std::string_view country);

// F with F F' = correlation, so that independent standard normals Z give the indices F Z.
//
//     correlation   n x n   symmetric, positive semi-definite up to rounding, which is clipped
//     returns       n x m   a column for each positive eigenvalue
Eigen::MatrixXd factor(Eigen::MatrixXd const& correlation);

}  // namespace model
