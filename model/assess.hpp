#pragma once

#include "model/book.hpp"
#include "model/migration.hpp"

#include <cstddef>
#include <cstdint>
#include <memory>
#include <span>
#include <vector>

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

// How the figures were reached: the same plan on the same book gives the same bits.
struct Plan {
    SimulationPlan simulation;
    double band = 0.01;  // contributions to the quantile: mean over losses within 1% of it
    std::uint64_t band_scenarios = 0;
    double band_scale = 1.0;  // the factor that makes the sum exact
};

enum class Contribution { var, es };

// The losses by name of the scenarios that contributions are means over, the tail (loss above the
// quantile) and the band (loss within `half_width` of it): what errors of sums need.
struct TailSample {
    struct Loss {
        std::uint32_t scenario;  // index into `total`
        double amount;           // beyond the name's base loss
    };
    std::vector<double> total;       // portfolio loss, a scenario
    std::vector<std::size_t> first;  // by name: its losses are [first[i], first[i + 1])
    std::vector<Loss> losses;
    std::vector<double> base;         // by name: its loss in a scenario in which it stays
    std::vector<double> at_quantile;  // by name: E[L_i | L = quantile], scaled to sum exactly
    std::vector<double> slope;        // by name: how at_quantile moves with the quantile; sums to 1
    std::vector<double> largest;      // by name: its largest possible |amount|
    std::uint64_t scenarios = 0;      // of the whole simulation
    double confidence = 0.0;
    double quantile = 0.0;
    double quantile_error = 0.0;
    double half_width = 0.0;
};

struct Figures {
    Totals totals;
    std::vector<NameFigures> names;  // as Book::names()
    Plan plan;
    TailSample sample;

    // One standard error of
    //
    //     (sum of the members' contributions) - share x (sum of all names' contributions)
    //
    // members: indices into `names`, each at most once. Base currency. To the scenarios drawn one
    // more is added, in which the largest loss that could move the difference most occurs: a sample
    // in which a rare loss happens to be missing must not pass for certainty.
    [[nodiscard]] double contribution_error(Contribution kind,
                                            std::span<std::uint32_t const> members,
                                            double share) const;
};

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

// The whole book, by closed forms and plain simulation. `threads` 0: all cores. Same book, settings
// and plan give the same bits for any number of threads.
Figures assess(Book const& book, unsigned threads);
Figures assess(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
               unsigned threads);

}  // namespace model
