#pragma once

#include "model/book.hpp"
#include "model/migration.hpp"

// What the model says of a book and of each of its names.

namespace model {

// One counterparty's measures over the horizon. Amounts in base currency, `_error` one standard
// error. Contributions are Euler's: they sum to credit VaR and to expected shortfall.
struct NameFigures {
    Probability default_probability;
    Probability downgrade_probability;
    double expected_loss = 0.0;
    double standalone_loss_deviation = 0.0;
    double var_contribution = 0.0;
    double var_contribution_error = 0.0;
    double es_contribution = 0.0;
    double es_contribution_error = 0.0;
};

// The loss of the names not in default.
struct Totals {
    double expected_loss = 0.0;
    double defaulted_loss = 0.0;  // EAD x LGD of the names in default; in no other total
    double loss_quantile = 0.0;
    double loss_quantile_error = 0.0;
    double credit_var = 0.0;  // loss_quantile - expected_loss
    double credit_var_error = 0.0;
    double expected_shortfall = 0.0;
    double expected_shortfall_error = 0.0;
};

enum class Contribution { var, es };

// The measures that have a closed form: every field of NameFigures but the contributions.
//
//     expected loss                 E[L_i]
//     standalone loss deviation     sqrt(E[L_i^2] - E[L_i]^2)
//
//     default_only   L_i = v on default
//     revaluation    L_i = EAD x value(from, to) in every grade, that of staying included, and v on
//                    default
//     v              EAD x LGD, or EAD x a beta variable of mean m = v / EAD with one draw a
//                    counterparty: a + b = m0 (1 - m0) / d^2 - 1 from model.yaml's m0 and d. An m
//                    of 0 or 1 leaves nothing to draw.
//
// In default: probability 1, expected loss v, all else 0.
NameFigures closed_form(Name const& name, Settings const& settings, Migration const& migration);

}  // namespace model
