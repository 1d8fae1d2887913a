#pragma once

#include "model/settings.hpp"
#include "tests/support/model_book.hpp"

#include <vector>

namespace tests {

// A third route, for small books: no sampling, no transform. Given the systematic factors Z names
// default independently, so that the loss's distribution grows name by name,
//
//     P(L = k | Z)  <-  (1 - p_i(Z)) P(L = k | Z) + p_i(Z) P(L = k - v_i | Z)
//
// on the whole multiples k of `unit`, as far as the quantile, what is beyond it being one bin; and
// Z, one or two standard normal factors, is summed over by the (product) trapezoid rule.
//
//     P(L_i = v_i, L = k)   E over Z of p_i(Z) P(L = k - v_i without i | Z)
//
// The sums are exact but for rounding, and the rule for smooth functions nearly so.
struct Lattice {
    std::vector<double> probability;  // of L = 0, unit, 2 unit, ... up to the quantile
    double loss_quantile = 0.0;       // min{x: P(L <= x) >= confidence}
    double probability_beyond = 0.0;  // P(L > loss_quantile)
    double expected_loss = 0.0;
    double expected_shortfall = 0.0;       // coherent: the atom at the quantile is split
    std::vector<double> var_contribution;  // by name: E[L_i | L = quantile] - E[L_i]
    // {E[L_i; L > q] + E[L_i | L = q] (P(L <= q) - confidence)} / (1 - confidence)
    std::vector<double> es_contribution;
};

// default_only with fixed recoveries, every loss a whole multiple of `unit` (base currency), at
// most two factors. Throws std::invalid_argument for what it cannot do.
Lattice lattice(Names const& names, model::Settings const& settings, double unit = 1.0);

}  // namespace tests
