#pragma once

#include "model/book.hpp"
#include "model/dependence.hpp"
#include "model/migration.hpp"

#include <Eigen/Core>

#include <array>
#include <cstddef>
#include <cstdint>
#include <memory>
#include <span>
#include <vector>

namespace model {

// The law that the systematic factors Z are drawn from, and what a scenario so drawn counts for.
//
//     g(z) = sum over k of share_k phi(z - m_k)      phi: standard normal density, unit variances
//     w(z) = phi(z) / g(z)                           in (0, 1 / share of the component at 0]
//
// Without means it is plain: g = phi, w = 1. Else the first component stands at 0, which bounds the
// weights. Scenario s comes from the component of stratum s mod 16, so that shares are sixteenths,
// met exactly by every sixteen scenarios; it is weighed by the whole mixture, whichever component
// it came from: the balance heuristic (Owen & Zhou, 2000, Safe and effective importance sampling,
// Journal of the American Statistical Association 95).
class FactorLaw {
public:
    static constexpr int strata = 16;

    FactorLaw() = default;
    // means: factors x components, the first column 0; sixteenths: a component's, each positive,
    // together 16.
    FactorLaw(Eigen::MatrixXd means, std::vector<int> const& sixteenths);

    [[nodiscard]] bool plain() const { return means_.cols() == 0; }
    [[nodiscard]] Eigen::MatrixXd const& means() const { return means_; }
    [[nodiscard]] Eigen::VectorXd const& shares() const { return shares_; }

    // Moves standard normal factors to where scenario `scenario` is drawn from.
    void shift(Eigen::VectorXd& factors, std::uint64_t scenario) const;
    [[nodiscard]] double weight(Eigen::VectorXd const& factors) const;

private:
    Eigen::MatrixXd means_;
    Eigen::VectorXd shares_;
    Eigen::VectorXd half_squares_;  // |m_k|^2 / 2
    std::array<std::uint8_t, strata> component_{};
};

// Simulation of the book, name by name, exact but for rounding.
//
// A scenario draws the systematic indices; given them, names leave their grade independently, names
// of one cell (grade, asset correlation, indices) with one probability p. Drawing the few that
// leave is cheaper than asking everyone. Lay the names end to end on a line, each as long as its
// hazard -log(1 - p), and let points fall on it with exponential gaps: a name is hit with
// probability exactly p. Every name is laid out a little longer than its hazard, by an upper bound
// looked up from the index, and a hit counts where it falls within the hazard itself; so the
// probability proper is worked out for names that are hit only (thinning: Lewis & Shedler, 1979,
// Simulation of nonhomogeneous Poisson processes by thinning, Naval Research Logistics Quarterly
// 26(3)).
//
// Random numbers are functions of (seed, scenario, count of draws) alone (Philox: Salmon, Moraes,
// Dror & Shaw, 2011, Parallel random numbers: as easy as 1, 2, 3), so any split of the scenarios
// over threads gives the same bits.
//
// Losses are counted in steps of a power of ten, below 1e-14 of the largest possible total, so that
// they add up exactly in any order and equal losses compare equal.
class Simulation {
public:
    // `names` as Book::names(). Those in default, and those that can lose nothing, take no part.
    // Settings and migration must live as long. The seed is that of the settings unless given.
    Simulation(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
               Migration const& migration, std::uint64_t seed);
    Simulation(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
               Migration const& migration)
        : Simulation{names, settings, migration, settings.simulation.seed} {}

    // A name that left its grade, and its loss beyond that of staying.
    struct Move {
        std::uint32_t name;  // index into `names`
        double amount;       // base currency
    };

    // By scenario: the book's loss, and the scenario's weight (none where the law is plain).
    struct Sample {
        std::vector<double> loss;
        std::vector<double> weight;
    };

    // The scenarios first, first + 1, ... first + count - 1. `threads` 0: all cores.
    [[nodiscard]] Sample sample(FactorLaw const& law, std::uint64_t first, std::size_t count,
                                unsigned threads) const;
    [[nodiscard]] std::vector<double> losses(std::uint64_t first, std::size_t count,
                                             unsigned threads) const {
        return sample({}, first, count, threads).loss;
    }

    // Draws the given scenarios again, one after the other, and tells visit(k, moves, indices) the
    // names that move in the k-th of them, each once, and the systematic indices.
    using Visit =
        std::function<void(std::size_t, std::span<Move const>, Eigen::VectorXd const& indices)>;
    void visit(FactorLaw const& law, std::span<std::uint64_t const> scenarios,
               Visit const& visit) const;
    [[nodiscard]] std::vector<std::vector<Move>> moves(std::span<std::uint64_t const> scenarios,
                                                       unsigned threads) const;

    // The systematic factors of a scenario.
    [[nodiscard]] Eigen::VectorXd factors(FactorLaw const& law, std::uint64_t scenario) const;

    // What a name's move can be expected to add once the indices are known, moves of other amounts
    // counted as nothing: E[amount; low <= amount <= high | indices].
    [[nodiscard]] double expected_move(std::uint32_t name, Eigen::VectorXd const& indices,
                                       double low, double high) const;

    // What losses are whole multiples of, but for rounding.
    [[nodiscard]] double step() const { return 1.0 / steps_per_unit_; }

    // By name: the loss in a scenario in which it stays, and the largest |amount| of a move.
    [[nodiscard]] std::vector<double> const& base() const { return base_; }
    [[nodiscard]] std::vector<double> const& largest() const { return largest_; }

private:
    // Names that share a grade and an asset correlation.
    struct Kind {
        std::uint8_t grade = 0;
        double asset_correlation = 0.0;
        double cut_down = 0.0;  // asset returns below it leave the grade downwards (default_only:
        double cut_up = 0.0;    // to default); those above it upwards
    };
    // Names that share kind and indices: members_[first_member], ...
    struct Cell {
        std::uint32_t blend = 0;
        std::uint32_t kind = 0;
        std::uint32_t first_member = 0;
        std::uint32_t members = 0;
    };
    // What a name brings to a move.
    struct Stake {
        double exposure_at_default = 0.0;
        double loss_at_default = 0.0;
        double steps_on_default = 0.0;
    };
    // Where the names of a cell that leave their grade go, once the index is known; worked out as
    // far as it is asked for, and then for all of them.
    struct Ways {
        double index = 0.0;
        double down = 0.0;  // probabilities of leaving in each direction
        double up = 0.0;
        std::vector<double> further;  // by state: of going beyond it; below 0: not asked for yet
    };
    // Room for one scenario, reused by the next.
    struct Scratch {
        Eigen::VectorXd factors;
        Eigen::VectorXd indices;
        std::vector<double> index;     // by blend
        std::vector<std::size_t> row;  // by blend: of the bounds
        Ways ways;
    };
    class Stream;

    [[nodiscard]] double largest_move(std::uint32_t name, Grade from) const;
    [[nodiscard]] Kind kind(Grade grade, double asset_correlation) const;
    [[nodiscard]] double steps(double loss) const;

    // The hazard of leaving once the index is known: one index for moves down and one for moves up,
    // which differ only to bound it.
    [[nodiscard]] static double hazard(Kind const& kind, double index_down, double index_up);
    [[nodiscard]] static double index_of(Blend const& blend, Eigen::VectorXd const& indices);
    void find_ways(Kind const& kind, double index, Ways& ways) const;
    [[nodiscard]] double further(Kind const& kind, std::size_t state, Ways& ways) const;
    // The steps the loss of a name moves by that leaves its grade.
    [[nodiscard]] double steps_of_move(std::uint32_t name, Kind const& kind, Ways& ways,
                                       Stream& stream) const;

    [[nodiscard]] Scratch scratch() const;
    static void draw_factors(FactorLaw const& law, std::uint64_t scenario, Stream& stream,
                             Eigen::VectorXd& factors);
    template <class OnMove>
    void run(FactorLaw const& law, std::uint64_t scenario, Scratch& scratch,
             OnMove const& on_move) const;

    Settings const& settings_;
    Migration const& migration_;
    std::uint64_t seed_;
    Eigen::MatrixXd factor_;
    std::vector<Kind> kinds_;
    std::vector<double> hazard_above_;  // bins of the index x kinds: bounds of the hazard wherever
    std::vector<double> hazard_below_;  // in the bin the index stands
    std::vector<Blend> blends_;
    std::vector<Cell> cells_;
    std::vector<std::uint32_t> members_;  // names, by cell
    std::vector<std::uint32_t> cell_of_;  // by name; `none` for those that take no part
    std::vector<Stake> stakes_;           // by name
    std::vector<double> base_;
    std::vector<double> largest_;
    double precision_ = 0.0;       // a + b of the beta distributed recoveries; 0: fixed
    bool one_amount_ = false;      // a name that moves defaults, and loses what it loses
    double steps_per_unit_ = 1.0;  // a power of ten
    double base_steps_ = 0.0;      // of all names
};

}  // namespace model
