#pragma once

#include "model/plan.hpp"

#include <Eigen/Core>

#include <vector>

namespace model {

// Scenarios of the systematic factors, in parts: the mean over a part's points of weight x f
// estimates E[f(Z)], Z independent standard normals, and so does the mean over parts.
struct Part {
    Eigen::MatrixXd factors;     // factors x points
    std::vector<double> weight;  // by point, over the number of points: they sum to about 1
};

// No factor: one point. One: the trapezoidal rule. Two: the product rule, fine along the mean of
// the plan's first component. These have parts only so that work can be shared out; together they
// are one rule. More: scrambled Sobol points under the plan's mixture, each component with its own
// axes, the first along its mean, and with weights by the balance heuristic; a part is an
// independent scrambling.
//
// Source: Sobol' (1967), On the distribution of points in a cube and the approximate evaluation of
// integrals, USSR Computational Mathematics and Mathematical Physics 7(4); direction numbers of Joe
// & Kuo (2008), Constructing Sobol sequences with better two-dimensional projections, SIAM Journal
// on Scientific Computing 30(5), as Boost has them; scrambled as Matousek (1998), On the
// L2-discrepancy for anchored boxes, Journal of Complexity 14(4). Owen & Zhou (2000), Safe and
// effective importance sampling, Journal of the American Statistical Association 95(449).
std::vector<Part> points(Plan const& plan, Eigen::Index factors, unsigned threads);

// Whether parts are independent, so that what they differ by tells the error of their mean.
inline bool is_sampled(Eigen::Index factors) {
    return factors > 2;
}

// The density of the plan's mixture over that of N(0, I).
double mixture_density(Plan const& plan, Eigen::Ref<Eigen::VectorXd const> const& factors);

}  // namespace model
