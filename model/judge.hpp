#pragma once

#include "model/figures.hpp"
#include "model/simulation.hpp"

#include <Eigen/Core>

#include <cstdint>
#include <memory>
#include <optional>
#include <span>
#include <vector>

namespace model {

// What a simulation is to do. The same plan on the same book gives the same bits, for any number of
// threads.
struct JudgePlan {
    // plain: the systematic factors as they are. shifted: from where losses at or beyond the
    // quantile come from, weighed by the likelihood ratio (FactorLaw); where to is found by a
    // pilot.
    enum class Mode { plain, shifted };

    std::uint64_t scenarios = 200'000;
    std::uint64_t seed = 1;
    Mode mode = Mode::plain;
    // Contributions to the quantile are means over the losses so near to it, in base currency; 0:
    // equal to it. Nothing: over the atom at the quantile where it holds thirty scenarios or more,
    // else over 1% of the quantile to either side.
    std::optional<double> resolution = std::nullopt;
    // So many names, those that contribute most to the shortfall, have their contributions
    // sharpened.
    std::size_t sharpened = 0;
};

// What contributions and their errors are made of, scenario batch by scenario batch: weighted sums
// over the tail (loss above the quantile) and the band (loss within `half_width` of it). Batches
// are independent of one another and as many scenarios each, so that their spread is the error.
struct JudgedSums {
    struct Part {
        Eigen::MatrixXd moves;  // names x batches: sum of w x (loss - base)
        Eigen::ArrayXd weight;  // by batch: sum of w
        Eigen::ArrayXd loss;    // by batch: sum of w x portfolio loss
        std::uint64_t scenarios = 0;
    };
    Part tail;
    Part band;
    Eigen::VectorXd base;         // by name: its loss in a scenario in which it stays
    Eigen::VectorXd at_quantile;  // by name: E[L_i | L = quantile], scaled to sum exactly
    Eigen::VectorXd slope;        // by name: how at_quantile moves with the quantile; sums to 1
    Eigen::VectorXd unseen;  // by name: its largest |amount| times what a scenario with it weighs
    double unseen_max = 0.0;
    double scenarios = 0.0;  // of the whole simulation
    double confidence = 0.0;
    double quantile = 0.0;
    double quantile_error = 0.0;
};

// A name's contributions, sharpened: the systematic factors Z and all other names are drawn, its
// own move is not, but counted with its probability,
//
//     E[L_i; L > q] = E over Z and the others of E[L_i 1(others + L_i > q) | Z, others]
//
// so that a default which is rare even in the tail costs no accuracy. For the quantile the
// contribution drawn stands where its error is less, as it is for names that are often in a loss of
// the band, or where few scenarios tell. The sums over all names are those of the contributions
// drawn; these have no part in them. In the errors, the scenario that added most is there once
// more.
struct Sharpened {
    std::uint32_t name = 0;  // index
    double var_contribution = 0.0;
    double var_contribution_error = 0.0;
    double es_contribution = 0.0;
    double es_contribution_error = 0.0;
};

struct Judgement {
    Totals totals;
    std::vector<NameFigures> names;  // as Book::names()
    std::vector<Sharpened> sharpened;
    JudgePlan plan;

    // What was found while running.
    FactorLaw law;                 // the systematic factors were drawn from
    double effective_share = 0.0;  // (sum of w)^2 / (scenarios x sum of w^2) over L >= quantile
    double half_width = 0.0;       // of the band
    double band_scale = 1.0;       // the factor that makes the contributions' sum exact
    JudgedSums sums;

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

// The whole book by simulation: the figures that the engine, which shares nothing with it but
// thresholds and loadings, is held against. `threads` 0: all cores.
//
//     loss quantile   q = min{x: P(L > x) <= 1 - confidence}
//     shortfall       q + E[max(L - q, 0)] / (1 - confidence)
//     contributions   Euler's, E[L_i | L = q] a mean over the band: see NameFigures
//
// where E and P are means over the scenarios with the weights of their law.
Judgement judge(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
                JudgePlan const& plan, unsigned threads);

}  // namespace model
