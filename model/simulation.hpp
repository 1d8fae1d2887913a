#pragma once

#include "model/book.hpp"
#include "model/dependence.hpp"
#include "model/migration.hpp"

#include <Eigen/Core>

#include <cstdint>
#include <memory>
#include <span>
#include <vector>

namespace model {

// The judge: plain simulation of the book, name by name, exact but for rounding.
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
    // Settings and migration must live as long.
    Simulation(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
               Migration const& migration);

    // A name that left its grade, and its loss beyond that of staying.
    struct Move {
        std::uint32_t name;  // index into `names`
        double amount;       // base currency
    };

    // The book's loss in the scenarios first, first + 1, ... first + count - 1. `threads` 0: all
    // cores.
    [[nodiscard]] std::vector<double> losses(std::uint64_t first, std::size_t count,
                                             unsigned threads) const;

    // The names that move in each of the given scenarios, each once.
    [[nodiscard]] std::vector<std::vector<Move>> moves(std::span<std::uint64_t const> scenarios,
                                                       unsigned threads) const;

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
    // On the line the names are laid out on.
    struct Point {
        double place = 0.0;
        std::size_t cell = 0;
    };
    // Room for one scenario, reused by the next.
    struct Scratch {
        Eigen::VectorXd factors;
        Eigen::VectorXd indices;
        std::vector<double> index;     // by blend
        std::vector<std::size_t> row;  // by blend: of the bounds
        std::vector<double> ends;      // by cell: where it ends on the line
        std::vector<Point> points;
    };
    class Stream;

    [[nodiscard]] double largest_move(std::uint32_t name, Grade from) const;
    [[nodiscard]] Kind kind(Grade grade, double asset_correlation) const;
    [[nodiscard]] double steps(double loss) const;

    // The hazard of leaving once the index is known: one index for moves down and one for moves up,
    // which differ only to bound it.
    [[nodiscard]] static double hazard(Kind const& kind, double index_down, double index_up);
    // The state of a name that leaves its grade, and the steps its loss then moves by.
    [[nodiscard]] std::size_t state_after(Kind const& kind, double index, Stream& stream) const;
    [[nodiscard]] double steps_of_move(std::uint32_t name, Kind const& kind, double index,
                                       Stream& stream) const;

    [[nodiscard]] Scratch scratch() const;
    template <class Visit>
    void run(std::uint64_t scenario, Scratch& scratch, Visit const& visit) const;

    Settings const& settings_;
    Migration const& migration_;
    Eigen::MatrixXd factor_;
    std::vector<Kind> kinds_;
    std::vector<double> hazard_above_;  // bins of the index x kinds: bounds of the hazard wherever
    std::vector<double> hazard_below_;  // in the bin the index stands
    std::vector<Blend> blends_;
    std::vector<Cell> cells_;
    std::vector<std::uint32_t> members_;  // names, by cell
    std::vector<Stake> stakes_;           // by name
    std::vector<double> base_;
    std::vector<double> largest_;
    double precision_ = 0.0;       // a + b of the beta distributed recoveries; 0: fixed
    bool one_amount_ = false;      // a name that moves defaults, and loses what it loses
    double steps_per_unit_ = 1.0;  // a power of ten
    double base_steps_ = 0.0;      // of all names
};

}  // namespace model
