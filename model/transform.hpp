#pragma once

#include "model/inversion.hpp"
#include "model/law.hpp"
#include "model/points.hpp"
#include "model/portfolio.hpp"

#include <array>
#include <cstddef>
#include <cstdint>
#include <memory>
#include <span>
#include <vector>

namespace model {

// Sums of the names' amounts by cell: what conditional cumulants of a book are made of.
class CellSums {
public:
    CellSums() = default;
    CellSums(Cells const& cells, Law const& law);
    void add(Cells const& cells, Stake const& stake, double count);

    [[nodiscard]] Form form() const { return form_; }
    // Amounts of a blend's group of kinds, one for each term.
    [[nodiscard]] Lanes const* of(std::size_t blend, std::size_t group) const {
        return sums_.data() + (blend * groups_ + group) * terms_;
    }

private:
    Form form_ = Form::fixed;
    std::size_t groups_ = 0;
    std::size_t terms_ = 0;
    LaneArray sums_;  // blends x groups x terms
};

// The first three cumulants of a book's move given the systematic factors.
//
//     indices   indices x points     returns   3 x points
Eigen::MatrixXd conditional_cumulants(Law const& law, std::span<Blend const> blends,
                                      CellSums const& sums, Eigen::MatrixXd const& indices);

// The transform of the book's move in every scenario, on every node of the contour.
//
//     phi(s, k) = e^{kappa_1 z + kappa_2 z^2 / 2 + kappa_3 z^3 / 6}  x  product over large names of
//                 (1 + sum over states j of p_j (M_j(z) - 1)),     z = z_k,
//
// kappa the conditional cumulants of the names that are not large, M_j the moment generating
// function of a large name's move to j. phi = E[phi(s, k)] over scenarios s.
class Transform {
public:
    Transform(std::shared_ptr<Cells const> cells, Plan const& plan, unsigned threads);

    // All names' stakes.
    void build(std::vector<Stake> const& stakes);
    // Stakes become others (one that takes no part: none). False where a factor that would have to
    // be taken out is too near to 0 for that: then all has to be built anew.
    [[nodiscard]] bool replace(std::span<std::pair<Stake, Stake> const> stakes);

    [[nodiscard]] LossCurve curve(double base) const;
    [[nodiscard]] Contour const& contour() const { return contour_; }

    // Fixed recoveries: the probability that no name moves, where x is not far above that; and the
    // largest that just one large name does (or one of several that lose the same) whose loss is
    // about x, half of it to either side. Other books have no such atoms of their loss: 0.
    struct Atoms {
        double none = 0.0;
        double one = 0.0;
    };
    [[nodiscard]] Atoms atoms(double x) const;
    [[nodiscard]] bool is_large(Stake const& stake) const {
        return stake.takes_part && stake.largest >= plan_.large_from;
    }
    [[nodiscard]] std::size_t large() const { return large_.size(); }
    // E[L_i; ...] of every name's move L_i, for linear functionals of the distribution of the loss.
    // A target gives the functional as weights on the nodes.
    static constexpr std::size_t targets = 2;
    struct Target {
        std::vector<Complex> weights;
        double image = 0.0;  // of each unit of mean loss, taken away
    };
    // Afterwards by_name() knows them.
    void differentiate(std::array<Target, targets> const& of, std::span<Target const> beside);
    // targets x parts
    void by_name(Stake const& stake, std::span<double> values) const;
    // Of a large name, the mean over parts for each of the targets beside.
    [[nodiscard]] std::span<double const> beside_of(Stake const& stake) const;
    [[nodiscard]] std::size_t parts() const { return parts_.size(); }
    // Of the points, how many count in the first target.
    [[nodiscard]] double effective_share() const { return effective_share_; }

private:
    // Large names alike in every respect.
    struct Move {
        std::size_t function;        // of the law of states
        double mean;                 // base currency
        std::vector<Complex> rise;   // M(z_k) - 1
        std::vector<Complex> slope;  // M'(z_k)
    };
    struct Large {
        Stake stake;
        Mixed mixed;
        double count = 1.0;
        std::vector<Move> moves;
    };

    void add(Stake stake, double count);
    [[nodiscard]] Large large(Stake const& stake) const;
    void reckon(std::size_t part);
    void count_in(Large large);
    bool change(std::size_t part, std::span<std::pair<Stake, double> const> small,
                std::span<Large const> large);
    void sum_up(std::size_t part);
    [[nodiscard]] LaneArray probabilities(std::size_t part, Large const& large) const;

    std::shared_ptr<Cells const> cells_;
    Plan plan_;
    unsigned threads_;
    Contour contour_;
    Law moments_;
    Law states_;
    std::vector<Part> parts_;
    std::vector<Eigen::MatrixXd> indices_;  // by part: indices x points
    CellSums sums_;
    CellSums counts_;  // of the same names, as if each lost 1
    std::vector<Large> large_;
    std::vector<std::vector<LaneArray>> probabilities_;  // parts x large

    std::vector<LaneArray> phi_;                    // by part: groups of points x nodes x (re, im)
    std::vector<std::vector<Complex>> transforms_;  // by part
    std::vector<double> mass_;
    std::vector<double> mean_;

    std::vector<double> by_cell_;          // (blend, kind) x terms x targets x parts
    std::vector<double> by_large_;         // large x targets x parts
    std::vector<double> beside_by_large_;  // large x targets beside
    std::size_t beside_ = 0;
    double effective_share_ = 1.0;
};

}  // namespace model
