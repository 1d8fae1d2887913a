#include "model/transform.hpp"

#include "model/parallel.hpp"

#include <Eigen/Eigenvalues>

#include <algorithm>
#include <cmath>
#include <numeric>
#include <utility>

namespace model {
namespace {

// Recurrences run over so many nodes before they start afresh, so that rounding stays below 1e-11.
constexpr std::size_t run_length = 64;
constexpr std::size_t points_per_block = 64;
constexpr double jacobi_points_max = 400.0;
constexpr double factor_min = 1e-3;
constexpr double pull_min = 1e-13;  // of the strongest: below what rounding makes of one
constexpr double near_none_widths = 8.0;
constexpr double atom_min = 1e-9;  // a probability that no quantile asked for depends on

constexpr std::size_t order_of(Form form, std::size_t term) {
    switch (form) {
        case Form::fixed:
            return term;
        case Form::beta:
            return term < 1 ? 0 : term < 3 ? 1 : 2;
        default:
            return term < 2 ? 0 : term < 6 ? 1 : 2;
    }
}

// The terms' coefficients for a group of kinds, in the order of amounts(): see Form.
template <Form form>
[[gnu::always_inline]] inline void coefficients(Law const& law, Law::Place const& place,
                                                std::size_t group, Lanes* c) {
    Lanes p;
    law.at(place, 0, group, p);
    Lanes const pp = p * p;
    if constexpr (form == Form::fixed) {
        Lanes const spread = p - pp;
        c[0] = p;
        c[1] = spread;
        c[2] = spread * (1.0 - 2.0 * p);
    } else if constexpr (form == Form::beta) {
        c[0] = p;
        c[1] = p;
        c[2] = -pp;
        c[3] = p;
        c[4] = -3.0 * pp;
        c[5] = 2.0 * pp * p;
    } else {
        Lanes a1;
        Lanes a2;
        Lanes a3;
        law.at(place, 1, group, a1);
        law.at(place, 2, group, a2);
        law.at(place, 3, group, a3);
        c[0] = a1;
        c[1] = p;
        c[2] = a2 - a1 * a1;
        c[3] = -2.0 * a1 * p;
        c[4] = -pp;
        c[5] = p;
        c[6] = a3 + a1 * (2.0 * a1 * a1 - 3.0 * a2);
        c[7] = p * (6.0 * a1 * a1 - 3.0 * a2);
        c[8] = 6.0 * a1 * pp;
        c[9] = -3.0 * a1 * p;
        c[10] = 2.0 * pp * p;
        c[11] = -3.0 * pp;
        c[12] = p;
    }
}

template <Form form>
constexpr std::size_t terms = form == Form::fixed  ? 3
                              : form == Form::beta ? 6
                                                   : terms_max;

[[gnu::always_inline]] inline double index_of(Blend const& blend, double const* indices) {
    return blend.first_weight * indices[blend.first] + blend.second_weight * indices[blend.second];
}

template <Form form>
[[gnu::always_inline]] inline void cumulants(Law const& law, std::span<Blend const> blends,
                                             CellSums const& sums, Eigen::MatrixXd const& indices,
                                             Eigen::MatrixXd& kappa) {
    for (Eigen::Index s = 0; s < indices.cols(); ++s) {
        double const* const index = indices.col(s).data();
        Lanes total[3] = {};
        for (std::size_t b = 0; b < blends.size(); ++b) {
            auto const place = law.place(index_of(blends[b], index));
            for (std::size_t g = 0; g < law.groups(); ++g) {
                Lanes c[terms<form>];
                coefficients<form>(law, place, g, c);
                Lanes const* const sum = sums.of(b, g);
                for (std::size_t t = 0; t < terms<form>; ++t)
                    total[order_of(form, t)] += c[t] * sum[t];
            }
        }
        for (Eigen::Index order = 0; order < 3; ++order) {
            kappa(order, s) = sum_of(total[order]);
        }
    }
}

#define LOADLINE_CUMULANTS(form)                                                               \
    LOADLINE_LANES void cumulants_##form(Law const& law, std::span<Blend const> blends,        \
                                         CellSums const& sums, Eigen::MatrixXd const& indices, \
                                         Eigen::MatrixXd& kappa) {                             \
        cumulants<Form::form>(law, blends, sums, indices, kappa);                              \
    }
LOADLINE_CUMULANTS(fixed)
LOADLINE_CUMULANTS(beta)
LOADLINE_CUMULANTS(revaluation)
#undef LOADLINE_CUMULANTS

// What every term's amount is worth to a target: sum over points of coefficient x pull of its
// order. pulls: points x orders x targets.
template <Form form>
[[gnu::always_inline]] inline void pull_cells(Law const& law, std::span<Blend const> blends,
                                              Eigen::MatrixXd const& indices,
                                              std::span<std::uint32_t const> points,
                                              double const* pulls, Lanes* worth) {
    constexpr std::size_t targets = Transform::targets;
    Law::Place places[points_per_block];
    for (std::size_t from = 0; from < points.size(); from += points_per_block) {
        std::size_t const count = std::min(points_per_block, points.size() - from);
        for (std::size_t b = 0; b < blends.size(); ++b) {
            for (std::size_t s = 0; s < count; ++s)
                places[s] = law.place(index_of(blends[b], indices.col(points[from + s]).data()));
            for (std::size_t g = 0; g < law.groups(); ++g) {
                Lanes* const stored = worth + (b * law.groups() + g) * terms<form> * targets;
                Lanes sum[terms<form> * targets];
                for (std::size_t i = 0; i < terms<form> * targets; ++i) sum[i] = stored[i];
                for (std::size_t s = 0; s < count; ++s) {
                    Lanes c[terms<form>];
                    coefficients<form>(law, places[s], g, c);
                    double const* const pull = pulls + std::size_t{points[from + s]} * 3 * targets;
                    for (std::size_t t = 0; t < terms<form>; ++t)
                        for (std::size_t target = 0; target < targets; ++target)
                            sum[t * targets + target] +=
                                c[t] * pull[order_of(form, t) * targets + target];
                }
                for (std::size_t i = 0; i < terms<form> * targets; ++i) stored[i] = sum[i];
            }
        }
    }
}

#define LOADLINE_PULL_CELLS(form)                                                      \
    LOADLINE_LANES void pull_cells_##form(                                             \
        Law const& law, std::span<Blend const> blends, Eigen::MatrixXd const& indices, \
        std::span<std::uint32_t const> points, double const* pulls, Lanes* worth) {    \
        pull_cells<Form::form>(law, blends, indices, points, pulls, worth);            \
    }
LOADLINE_PULL_CELLS(fixed)
LOADLINE_PULL_CELLS(beta)
LOADLINE_PULL_CELLS(revaluation)
#undef LOADLINE_PULL_CELLS

// Four complex numbers, one of each scenario.
struct Quad {
    Lanes re;
    Lanes im;
};

[[gnu::always_inline]] inline void multiply(Quad& a, Quad const& b) {
    Lanes const re = a.re * b.re - a.im * b.im;
    a.im = a.re * b.im + a.im * b.re;
    a.re = re;
}

// What e^K starts a run of nodes with: its value, and the ratios of neighbours, of those ratios,
// and of theirs, which K being cubic are the same everywhere.
struct Run {
    Quad value;
    Quad ratio;
    Quad second;
    Quad third;
};

Run run_from(Complex z, double step, double const* kappa) {
    Complex const i{0.0, step};
    Run run{};
    for (std::size_t lane = 0; lane < lane_count; ++lane) {
        double const k1 = kappa[3 * lane];
        double const k2 = kappa[3 * lane + 1];
        double const k3 = kappa[3 * lane + 2];
        auto const set = [lane](Quad& quad, Complex exponent) {
            Complex const value = std::exp(exponent);
            quad.re[lane] = value.real();
            quad.im[lane] = value.imag();
        };
        set(run.value, z * (k1 + z * (0.5 * k2 + z * (k3 / 6.0))));
        set(run.ratio,
            i * (k1 + k2 * (z + 0.5 * i) + k3 * (0.5 * z * z + 0.5 * z * i + i * i / 6.0)));
        set(run.second, i * i * (k2 + k3 * (z + i)));
        set(run.third, i * i * i * k3);
    }
    return run;
}

// The run multiplied into phi.
LOADLINE_LANES void multiply_run(Run run, std::size_t count, Lanes* phi) {
    for (std::size_t k = 0; k < count; ++k) {
        Quad value{phi[2 * k], phi[2 * k + 1]};
        multiply(value, run.value);
        phi[2 * k] = value.re;
        phi[2 * k + 1] = value.im;
        multiply(run.value, run.ratio);
        multiply(run.ratio, run.second);
        multiply(run.second, run.third);
    }
}

// phi without a factor. False where one is too near to 0 to be taken out again.
LOADLINE_LANES bool divide_on(Lanes const* factor, std::size_t count, Lanes* phi) {
    double smallest = 1.0;
    for (std::size_t k = 0; k < count; ++k) {
        Lanes const re = factor[2 * k];
        Lanes const im = factor[2 * k + 1];
        Lanes const square = re * re + im * im;
        Lanes const a = phi[2 * k];
        Lanes const b = phi[2 * k + 1];
        phi[2 * k] = (a * re + b * im) / square;
        phi[2 * k + 1] = (b * re - a * im) / square;
        for (std::size_t lane = 0; lane < lane_count; ++lane)
            smallest = square[lane] < smallest ? square[lane] : smallest;
    }
    return smallest > factor_min * factor_min;
}

// One at every node.
LOADLINE_LANES void set_to_one(std::size_t count, Lanes* factor) {
    for (std::size_t k = 0; k < count; ++k) {
        factor[2 * k] = Lanes{} + 1.0;
        factor[2 * k + 1] = Lanes{};
    }
}

// The factor of a large name on a run of nodes, 1 + sum of p_j (M_j - 1), added to.
LOADLINE_LANES void add_move(Lanes const& p, Complex const* rise, std::size_t count,
                             Lanes* factor) {
    for (std::size_t k = 0; k < count; ++k) {
        factor[2 * k] += p * rise[k].real();
        factor[2 * k + 1] += p * rise[k].imag();
    }
}

LOADLINE_LANES void multiply_on(Lanes const* factor, std::size_t count, double power, Lanes* phi) {
    for (std::size_t k = 0; k < count; ++k) {
        Quad value{phi[2 * k], phi[2 * k + 1]};
        Quad square{factor[2 * k], factor[2 * k + 1]};
        for (auto left = static_cast<std::uint64_t>(power); left > 0; left >>= 1U) {
            if ((left & 1U) != 0) multiply(value, square);
            if (left > 1) multiply(square, square);
        }
        phi[2 * k] = value.re;
        phi[2 * k + 1] = value.im;
    }
}

// phi with the factor of a name that has but one move.
LOADLINE_LANES void multiply_move(Lanes const& p, Complex const* rise, std::size_t count,
                                  Lanes* phi) {
    for (std::size_t k = 0; k < count; ++k) {
        Quad value{phi[2 * k], phi[2 * k + 1]};
        multiply(value, {1.0 + p * rise[k].real(), p * rise[k].imag()});
        phi[2 * k] = value.re;
        phi[2 * k + 1] = value.im;
    }
}

// Sums, over nodes, Re weights x phi: the weights by node of several functionals.
LOADLINE_LANES void real_dots(Lanes const* phi, std::size_t nodes, double const* weights,
                              std::size_t functionals, Lanes* sums) {
    for (std::size_t f = 0; f < functionals; ++f) {
        double const* const w = weights + f * nodes * 2;
        Lanes even{};
        Lanes odd{};
        for (std::size_t k = 0; k < nodes; ++k) {
            even += w[2 * k] * phi[2 * k];
            odd += w[2 * k + 1] * phi[2 * k + 1];
        }
        sums[f] = even - odd;
    }
}

// Adds weight x phi p / factor.
LOADLINE_LANES void add_quotient(Lanes const* phi, Lanes const* factor, Lanes const& weight,
                                 std::size_t nodes, Lanes* sums) {
    for (std::size_t k = 0; k < nodes; ++k) {
        Lanes const re = factor[2 * k];
        Lanes const im = factor[2 * k + 1];
        Lanes const scale = weight / (re * re + im * im);
        Lanes const a = phi[2 * k];
        Lanes const b = phi[2 * k + 1];
        sums[2 * k] += (a * re + b * im) * scale;
        sums[2 * k + 1] += (b * re - a * im) * scale;
    }
}

// The same for a name that has but one move.
LOADLINE_LANES void add_quotient_of_move(Lanes const* phi, Lanes const& p, Complex const* rise,
                                         Lanes const& weight, std::size_t nodes, Lanes* sums) {
    for (std::size_t k = 0; k < nodes; ++k) {
        Lanes const re = 1.0 + p * rise[k].real();
        Lanes const im = p * rise[k].imag();
        Lanes const scale = weight / (re * re + im * im);
        Lanes const a = phi[2 * k];
        Lanes const b = phi[2 * k + 1];
        sums[2 * k] += (a * re + b * im) * scale;
        sums[2 * k + 1] += (b * re - a * im) * scale;
    }
}

LOADLINE_LANES void add_weighted(Lanes const* phi, Lanes const& weight, std::size_t nodes,
                                 Lanes* sums) {
    for (std::size_t i = 0; i < 2 * nodes; ++i) sums[i] += weight * phi[i];
}

// One name's cumulants at each point, `count` times, added.
template <Form form>
void add_cumulants(Law const& law, Blend const& blend, Mixed const& mixed,
                   std::array<double, terms_max> const& amount, double count,
                   Eigen::MatrixXd const& indices, Eigen::MatrixXd& kappa) {
    for (Eigen::Index s = 0; s < indices.cols(); ++s) {
        auto const place = law.place(index_of(blend, indices.col(s).data()));
        for (std::size_t m = 0; m < mixed.count; ++m) {
            Lanes c[terms<form>];
            coefficients<form>(law, place, mixed.kind[m] / lane_count, c);
            for (std::size_t t = 0; t < terms<form>; ++t)
                kappa(static_cast<Eigen::Index>(order_of(form, t)), s) +=
                    count * mixed.weight[m] * amount[t] * c[t][mixed.kind[m] % lane_count];
        }
    }
}

void add_cumulants(Law const& law, Form form, Blend const& blend, Mixed const& mixed,
                   Stake const& stake, double count, Eigen::MatrixXd const& indices,
                   Eigen::MatrixXd& kappa) {
    auto const amount = amounts(form, stake);
    switch (form) {
        case Form::fixed:
            return add_cumulants<Form::fixed>(law, blend, mixed, amount, count, indices, kappa);
        case Form::beta:
            return add_cumulants<Form::beta>(law, blend, mixed, amount, count, indices, kappa);
        default:
            return add_cumulants<Form::revaluation>(law, blend, mixed, amount, count, indices,
                                                    kappa);
    }
}

Complex complex_sum_of(Lanes const* quad) {
    return {sum_of(quad[0]), sum_of(quad[1])};
}

// Nodes and weights of the mean over a beta variable, as Golub & Welsch (1969), Calculation of
// Gauss quadrature rules, Mathematics of Computation 23, from the recurrence of Jacobi's
// polynomials.
std::pair<Eigen::VectorXd, Eigen::VectorXd> gauss_jacobi(double a, double b, Eigen::Index count) {
    // On [-1, 1] the weight is (1 - x)^alpha (1 + x)^beta.
    double const alpha = b - 1.0;
    double const beta = a - 1.0;
    Eigen::VectorXd diagonal(count);
    Eigen::VectorXd beside(std::max<Eigen::Index>(count - 1, 0));
    for (Eigen::Index n = 0; n < count; ++n) {
        auto const k = static_cast<double>(n);
        double const s = 2.0 * k + alpha + beta;
        diagonal[n] = n == 0 ? (beta - alpha) / (alpha + beta + 2.0)
                             : (beta * beta - alpha * alpha) / (s * (s + 2.0));
        if (n == 0) continue;
        double const square =
            n == 1 ? 4.0 * (1.0 + alpha) * (1.0 + beta) /
                         ((2.0 + alpha + beta) * (2.0 + alpha + beta) * (3.0 + alpha + beta))
                   : 4.0 * k * (k + alpha) * (k + beta) * (k + alpha + beta) /
                         (s * s * (s + 1.0) * (s - 1.0));
        beside[n - 1] = std::sqrt(square);
    }
    Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> solver;
    solver.computeFromTridiagonal(diagonal, beside);
    return {(0.5 * (solver.eigenvalues().array() + 1.0)).matrix(),
            solver.eigenvectors().row(0).array().square().matrix().transpose()};
}

}  // namespace

CellSums::CellSums(Cells const& cells, Law const& law)
    : form_{form_of(cells.settings())},
      groups_{law.groups()},
      terms_{terms_of(form_)},
      sums_(cells.blends().size() * groups_ * terms_) {}

void CellSums::add(Cells const& cells, Stake const& stake, double count) {
    auto const amount = amounts(form_, stake);
    auto const mixed = cells.mixed(stake);
    for (std::size_t m = 0; m < mixed.count; ++m) {
        std::size_t const kind = mixed.kind[m];
        Lanes* const sum = &sums_[(stake.blend * groups_ + kind / lane_count) * terms_];
        for (std::size_t t = 0; t < terms_; ++t)
            sum[t][kind % lane_count] += count * mixed.weight[m] * amount[t];
    }
}

Eigen::MatrixXd conditional_cumulants(Law const& law, std::span<Blend const> blends,
                                      CellSums const& sums, Eigen::MatrixXd const& indices) {
    Eigen::MatrixXd kappa(3, indices.cols());
    switch (sums.form()) {
        case Form::fixed:
            cumulants_fixed(law, blends, sums, indices, kappa);
            break;
        case Form::beta:
            cumulants_beta(law, blends, sums, indices, kappa);
            break;
        default:
            cumulants_revaluation(law, blends, sums, indices, kappa);
    }
    return kappa;
}

Transform::Transform(std::shared_ptr<Cells const> cells, Plan const& plan, unsigned threads)
    : cells_{std::move(cells)},
      plan_{plan},
      threads_{threads},
      contour_{plan},
      moments_{*cells_, Law::Of::moments},
      states_{*cells_, Law::Of::states},
      parts_{points(plan, cells_->loadings().cols(), threads)} {
    // Whole groups of points: what is missing to the last has no weight.
    for (auto& [factors, weight] : parts_) {
        auto const padded = in_lanes(weight.size()) * lane_count;
        factors.conservativeResize(Eigen::NoChange, static_cast<Eigen::Index>(padded));
        for (auto s = static_cast<Eigen::Index>(weight.size()); s < factors.cols(); ++s)
            factors.col(s).setZero();
        weight.resize(padded, 0.0);
        indices_.emplace_back(cells_->loadings() * factors);
        mass_.push_back(std::accumulate(weight.begin(), weight.end(), 0.0));
    }
    phi_.resize(parts_.size());
    probabilities_.resize(parts_.size());
    transforms_.resize(parts_.size());
    mean_.resize(parts_.size());
}

void Transform::build(std::vector<Stake> const& stakes) {
    sums_ = counts_ = CellSums{*cells_, moments_};
    large_.clear();
    std::vector<Stake const*> apart;
    for (auto const& stake : stakes) {
        if (!stake.takes_part) continue;
        if (is_large(stake))
            apart.push_back(&stake);
        else
            add(stake, 1.0);
    }
    auto const key = [](Stake const* s) {
        return std::tuple{s->blend,      s->grade, s->asset_correlation, s->exposure,
                          s->on_default, s->base,  s->beta_exposure,     s->beta_mean};
    };
    std::ranges::sort(apart, {}, key);
    for (auto const* const stake : apart) {
        if (!large_.empty() && large_.back().stake == *stake)
            large_.back().count += 1.0;
        else
            large_.push_back(
                {.stake = *stake, .mixed = cells_->mixed(*stake), .count = 1.0, .moves = {}});
    }
    for_each_of(large_.size(), threads_,
                [&](std::size_t l) { large_[l].moves = large(large_[l].stake).moves; });
    for_each_of(parts_.size(), threads_, [&](std::size_t p) { reckon(p); });
}

void Transform::add(Stake stake, double count) {
    sums_.add(*cells_, stake, count);
    stake.on_default = {1.0, 1.0, 1.0};
    counts_.add(*cells_, stake, count);
}

Transform::Atoms Transform::atoms(double x) const {
    Atoms atoms;
    auto const is_near = [x](Large const& large) {
        return std::abs(large.stake.on_default[0] - x) <= 0.5 * x;
    };
    bool const near_none = x <= near_none_widths * plan_.width;
    if (sums_.form() != Form::fixed || !(near_none || std::ranges::any_of(large_, is_near)))
        return atoms;
    std::vector<double> one(large_.size());
    for (std::size_t part = 0; part < parts_.size(); ++part) {
        auto const& weight = parts_[part].weight;
        auto const kappa =
            conditional_cumulants(moments_, cells_->blends(), counts_, indices_[part]);
        auto const& p = probabilities_[part];
        double none = 0.0;
        for (std::size_t s = 0; s < weight.size(); ++s) {
            // -log(1 - p) = p + p^2 / 2 + ..., and the second cumulant is p - p^2.
            auto const point = static_cast<Eigen::Index>(s);
            double hazard = kappa(0, point) + 0.5 * (kappa(0, point) - kappa(1, point));
            auto const own = [&](std::size_t l) {
                return large_[l].moves.empty() ? 0.0 : p[l][s / lane_count][s % lane_count];
            };
            for (std::size_t l = 0; l < large_.size(); ++l)
                hazard -= large_[l].count * std::log1p(-std::min(own(l), 1.0 - 1e-16));
            double const stays = weight[s] * std::exp(-hazard);
            none += stays;
            for (std::size_t l = 0; l < large_.size(); ++l)
                if (is_near(large_[l]))
                    one[l] +=
                        large_[l].count * stays * own(l) / (1.0 - std::min(own(l), 1.0 - 1e-16));
        }
        atoms.none += none;
        if (part == 0 && none < atom_min) return {};
    }
    auto const parts = static_cast<double>(parts_.size());
    atoms.none /= parts;
    if (!one.empty()) atoms.one = *std::ranges::max_element(one) / parts;
    return atoms;
}

// A large name's moves, with their transforms on the contour.
Transform::Large Transform::large(Stake const& stake) const {
    auto const& settings = cells_->settings();
    auto const grades = settings.grades.size();
    auto const probability = cells_->migration().matrix().row(stake.grade);
    bool const revaluation = settings.loss == LossKind::revaluation;
    auto const& nodes = contour_.nodes();
    Large large{.stake = stake, .mixed = cells_->mixed(stake), .count = 1.0, .moves = {}};

    auto const move = [&](std::size_t function, double mean) -> Move& {
        return large.moves.emplace_back(Move{function, mean,
                                             std::vector<Complex>(nodes.size(), -1.0),
                                             std::vector<Complex>(nodes.size(), 0.0)});
    };
    auto const add = [&](Move& to, double amount, double share) {
        for (std::size_t k = 0; k < nodes.size(); ++k) {
            Complex const value = share * std::exp(nodes[k] * amount);
            to.rise[k] += value;
            to.slope[k] += amount * value;
        }
    };

    if (revaluation)
        for (std::size_t to = 0; to < grades; ++to) {
            auto const state = static_cast<Eigen::Index>(to);
            double const amount =
                stake.exposure * settings.grade_values(stake.grade, state) - stake.base;
            if (to == stake.grade || probability[state] <= 0.0 || amount == 0.0) continue;
            add(move(to, amount), amount, 1.0);
        }
    if (probability[static_cast<Eigen::Index>(grades)] <= 0.0) return large;
    Move& on_default = move(revaluation ? grades : 0, stake.on_default[0]);
    if (stake.beta_exposure == 0.0) {
        add(on_default, stake.on_default[0], 1.0);
        return large;
    }
    double const a = stake.beta_mean * cells_->recovery_precision();
    double const b = cells_->recovery_precision() - a;
    double const exposure = stake.beta_exposure;
    double const reach = std::abs(nodes.back()) * exposure;
    auto const count = static_cast<Eigen::Index>(std::min(16.0 + reach / 3.0, jacobi_points_max));
    auto const [places, weights] = gauss_jacobi(a, b, count);
    for (Eigen::Index n = 0; n < count; ++n)
        add(on_default, exposure * places[n] - stake.base, weights[n]);
    return large;
}

// Of a large name's moves in every point of a part: moves x groups of points.
LaneArray Transform::probabilities(std::size_t part, Large const& large) const {
    auto const& indices = indices_[part];
    auto const& blend = cells_->blends()[large.stake.blend];
    std::size_t const groups = parts_[part].weight.size() / lane_count;
    LaneArray p(large.moves.size() * groups);
    for (std::size_t s = 0; s < groups * lane_count; ++s) {
        auto const place =
            states_.place(index_of(blend, indices.col(static_cast<Eigen::Index>(s)).data()));
        for (std::size_t j = 0; j < large.moves.size(); ++j)
            for (std::size_t m = 0; m < large.mixed.count; ++m)
                p[j * groups + s / lane_count][s % lane_count] +=
                    large.mixed.weight[m] *
                    states_.at(place, large.moves[j].function, large.mixed.kind[m]);
    }
    return p;
}

// phi of a part.
void Transform::reckon(std::size_t part) {
    auto const& weight = parts_[part].weight;
    std::size_t const groups = weight.size() / lane_count;
    auto const& nodes = contour_.nodes();
    auto const kappa = conditional_cumulants(moments_, cells_->blends(), sums_, indices_[part]);
    auto& p = probabilities_[part];
    p.clear();
    for (auto const& large : large_) p.push_back(probabilities(part, large));

    auto& phi = phi_[part];
    phi.clear_to(groups * nodes.size() * 2);
    LaneArray factor(2 * run_length);
    double mean = 0.0;
    for (std::size_t g = 0; g < groups; ++g) {
        Lanes* const own = &phi[g * nodes.size() * 2];
        double const* const own_kappa = kappa.col(static_cast<Eigen::Index>(g * lane_count)).data();
        for (std::size_t from = 0; from < nodes.size(); from += run_length) {
            std::size_t const count = std::min(run_length, nodes.size() - from);
            set_to_one(count, own + 2 * from);
            multiply_run(run_from(nodes[from], contour_.step(), own_kappa), count, own + 2 * from);
            for (std::size_t l = 0; l < large_.size(); ++l) {
                auto const& moves = large_[l].moves;
                if (moves.size() == 1 && large_[l].count == 1.0) {
                    multiply_move(p[l][g], &moves[0].rise[from], count, own + 2 * from);
                    continue;
                }
                set_to_one(count, factor.data());
                for (std::size_t j = 0; j < moves.size(); ++j)
                    add_move(p[l][j * groups + g], &moves[j].rise[from], count, factor.data());
                multiply_on(factor.data(), count, large_[l].count, own + 2 * from);
            }
        }
        Lanes const& w = lanes_at(&weight[g * lane_count]);
        for (std::size_t lane = 0; lane < lane_count; ++lane) mean += w[lane] * own_kappa[3 * lane];
        for (std::size_t l = 0; l < large_.size(); ++l)
            for (std::size_t j = 0; j < large_[l].moves.size(); ++j)
                mean +=
                    large_[l].count * large_[l].moves[j].mean * sum_of(w * p[l][j * groups + g]);
    }
    mean_[part] = mean;
    sum_up(part);
}

// E[phi] over a part's points.
void Transform::sum_up(std::size_t part) {
    auto const& weight = parts_[part].weight;
    std::size_t const nodes = contour_.nodes().size();
    LaneArray sums(2 * nodes);
    for (std::size_t g = 0; g < weight.size() / lane_count; ++g)
        add_weighted(&phi_[part][g * nodes * 2], lanes_at(&weight[g * lane_count]), nodes,
                     sums.data());
    transforms_[part].resize(nodes);
    for (std::size_t k = 0; k < nodes; ++k) transforms_[part][k] = complex_sum_of(&sums[2 * k]);
}

void Transform::count_in(Large large) {
    auto const found = std::ranges::find(large_, large.stake, &Large::stake);
    if (found == large_.end()) {
        for (std::size_t part = 0; part < parts_.size(); ++part)
            probabilities_[part].push_back(probabilities(part, large));
        large_.push_back(std::move(large));
        return;
    }
    found->count += large.count;
    if (found->count > 0.0) return;
    for (auto& part : probabilities_) part.erase(part.begin() + (found - large_.begin()));
    large_.erase(found);
}

bool Transform::replace(std::span<std::pair<Stake, Stake> const> stakes) {
    std::vector<std::pair<Stake, double>> small;
    std::vector<Large> apart;
    for (auto const& [before, after] : stakes)
        for (auto const& [stake, count] : {std::pair{before, -1.0}, std::pair{after, 1.0}}) {
            if (!stake.takes_part) continue;
            if (is_large(stake)) {
                apart.push_back(large(stake));
                apart.back().count = count;
            } else {
                small.emplace_back(stake, count);
            }
        }
    std::vector<char> done(parts_.size());
    for_each_of(parts_.size(), threads_,
                [&](std::size_t p) { done[p] = change(p, small, apart) ? 1 : 0; });
    for (auto const& [stake, count] : small) add(stake, count);
    for (auto& large : apart) count_in(std::move(large));
    return std::ranges::all_of(done, [](char const part) { return part != 0; });
}

// phi of a part after names came and went.
bool Transform::change(std::size_t part, std::span<std::pair<Stake, double> const> small,
                       std::span<Large const> large) {
    auto const& weight = parts_[part].weight;
    auto const& nodes = contour_.nodes();
    auto const& indices = indices_[part];
    auto& phi = phi_[part];
    std::size_t const groups = weight.size() / lane_count;

    // By point, what the small names change the cumulants by.
    Eigen::MatrixXd kappa = Eigen::MatrixXd::Zero(3, indices.cols());
    for (auto const& [stake, count] : small)
        add_cumulants(moments_, sums_.form(), cells_->blends()[stake.blend], cells_->mixed(stake),
                      stake, count, indices, kappa);
    std::vector<LaneArray> p;
    for (auto const& one : large) p.push_back(probabilities(part, one));

    LaneArray factor(2 * run_length);
    bool possible = true;
    for (std::size_t g = 0; g < groups; ++g) {
        Lanes* const own = &phi[g * nodes.size() * 2];
        double const* const own_kappa = kappa.col(static_cast<Eigen::Index>(g * lane_count)).data();
        Lanes const& w = lanes_at(&weight[g * lane_count]);
        for (std::size_t lane = 0; lane < lane_count; ++lane)
            mean_[part] += w[lane] * own_kappa[3 * lane];
        for (std::size_t from = 0; from < nodes.size(); from += run_length) {
            std::size_t const count = std::min(run_length, nodes.size() - from);
            if (!small.empty())
                multiply_run(run_from(nodes[from], contour_.step(), own_kappa), count,
                             own + 2 * from);
            for (std::size_t l = 0; l < large.size(); ++l) {
                set_to_one(count, factor.data());
                for (std::size_t j = 0; j < large[l].moves.size(); ++j)
                    add_move(p[l][j * groups + g], &large[l].moves[j].rise[from], count,
                             factor.data());
                if (large[l].count > 0.0)
                    multiply_on(factor.data(), count, 1.0, own + 2 * from);
                else
                    possible = divide_on(factor.data(), count, own + 2 * from) && possible;
            }
        }
        for (std::size_t l = 0; l < large.size(); ++l)
            for (std::size_t j = 0; j < large[l].moves.size(); ++j)
                mean_[part] +=
                    large[l].count * large[l].moves[j].mean * sum_of(w * p[l][j * groups + g]);
    }
    sum_up(part);
    return possible;
}

LossCurve Transform::curve(double base) const {
    return {contour_,    plan_, base, is_sampled(cells_->loadings().cols()),
            transforms_, mass_, mean_};
}

void Transform::differentiate(std::array<Target, targets> const& of,
                              std::span<Target const> beside) {
    auto const& nodes = contour_.nodes();
    Form const form = sums_.form();
    std::size_t const term_count = terms_of(form);
    std::size_t const kinds = moments_.groups() * lane_count;
    std::size_t const cells = cells_->blends().size() * kinds;
    by_cell_.assign(cells * term_count * targets * parts_.size(), 0.0);
    by_large_.assign(large_.size() * targets * parts_.size(), 0.0);
    beside_ = beside.size();
    std::vector<double> beside_by_part(parts_.size() * large_.size() * beside_);
    std::vector<double> counts(parts_.size());
    std::vector<double> squares(parts_.size());

    // A small name's move has the derivative kappa_1 + kappa_2 z + kappa_3 z^2 / 2.
    std::vector<double> weights;
    for (std::size_t order = 0; order < 3; ++order)
        for (auto const& target : of)
            for (std::size_t k = 0; k < nodes.size(); ++k) {
                Complex const z = nodes[k];
                Complex const w = target.weights[k] * (order == 0   ? 1.0
                                                       : order == 1 ? z
                                                                    : 0.5 * z * z);
                weights.push_back(w.real());
                weights.push_back(w.imag());
            }

    for_each_of(parts_.size(), threads_, [&](std::size_t p) {
        auto const& weight = parts_[p].weight;
        std::size_t const groups = weight.size() / lane_count;
        auto const& phi = phi_[p];

        std::vector<double> pulls(weight.size() * 3 * targets);
        LaneArray sums(3 * targets);
        for (std::size_t g = 0; g < groups; ++g) {
            real_dots(&phi[g * nodes.size() * 2], nodes.size(), weights.data(), 3 * targets,
                      sums.data());
            for (std::size_t lane = 0; lane < lane_count; ++lane) {
                std::size_t const s = g * lane_count + lane;
                for (std::size_t f = 0; f < 3 * targets; ++f) {
                    double const image = f < targets ? of[f].image : 0.0;
                    pulls[s * 3 * targets + f] = weight[s] * (sums[f][lane] - image);
                }
                counts[p] += pulls[s * 3 * targets];
                squares[p] += pulls[s * 3 * targets] * pulls[s * 3 * targets];
            }
        }
        // Points from which no loss comes near the quantile pull at nothing.
        double strongest[targets] = {};
        for (std::size_t s = 0; s < weight.size(); ++s)
            for (std::size_t target = 0; target < targets; ++target)
                strongest[target] =
                    std::max(strongest[target], std::abs(pulls[s * 3 * targets + target]));
        std::vector<std::uint32_t> active;
        std::vector<std::uint32_t> points;
        for (std::uint32_t g = 0; g < groups; ++g) {
            bool pulls_at_all = false;
            for (std::size_t s = g * lane_count; s < (g + 1) * lane_count; ++s)
                for (std::size_t target = 0; target < targets; ++target)
                    pulls_at_all = pulls_at_all || std::abs(pulls[s * 3 * targets + target]) >
                                                       pull_min * strongest[target];
            if (!pulls_at_all) continue;
            active.push_back(g);
            for (std::uint32_t s = g * lane_count; s < (g + 1) * lane_count; ++s)
                points.push_back(s);
        }
        LaneArray worth(cells / lane_count * term_count * targets);
        switch (form) {
            case Form::fixed:
                pull_cells_fixed(moments_, cells_->blends(), indices_[p], points, pulls.data(),
                                 worth.data());
                break;
            case Form::beta:
                pull_cells_beta(moments_, cells_->blends(), indices_[p], points, pulls.data(),
                                worth.data());
                break;
            default:
                pull_cells_revaluation(moments_, cells_->blends(), indices_[p], points,
                                       pulls.data(), worth.data());
        }
        for (std::size_t cell = 0; cell < cells; ++cell)
            for (std::size_t i = 0; i < term_count * targets; ++i)
                by_cell_[(cell * term_count * targets + i) * parts_.size() + p] =
                    worth[cell / lane_count * term_count * targets + i][cell % lane_count];

        // A large name's has sum of p_j M_j' over its own factor.
        LaneArray factor(2 * nodes.size());
        LaneArray quotient;
        for (std::size_t l = 0; l < large_.size(); ++l) {
            auto const& [stake, mixed, count, moves] = large_[l];
            auto const& own = probabilities_[p][l];
            quotient.clear_to(moves.size() * 2 * nodes.size());
            double mean = 0.0;
            for (std::size_t const g : active) {
                Lanes const& w = lanes_at(&weight[g * lane_count]);
                Lanes const* const own_phi = &phi[g * nodes.size() * 2];
                for (std::size_t j = 0; j < moves.size(); ++j)
                    mean += moves[j].mean * sum_of(w * own[j * groups + g]);
                if (moves.size() == 1) {
                    add_quotient_of_move(own_phi, own[g], moves[0].rise.data(), w * own[g],
                                         nodes.size(), quotient.data());
                    continue;
                }
                set_to_one(nodes.size(), factor.data());
                for (std::size_t j = 0; j < moves.size(); ++j)
                    add_move(own[j * groups + g], moves[j].rise.data(), nodes.size(),
                             factor.data());
                for (std::size_t j = 0; j < moves.size(); ++j)
                    add_quotient(own_phi, factor.data(), w * own[j * groups + g], nodes.size(),
                                 &quotient[j * 2 * nodes.size()]);
            }
            std::vector<Complex> derivative(nodes.size());
            for (std::size_t j = 0; j < moves.size(); ++j)
                for (std::size_t k = 0; k < nodes.size(); ++k)
                    derivative[k] +=
                        moves[j].slope[k] * complex_sum_of(&quotient[(j * nodes.size() + k) * 2]);
            auto const value = [&](Target const& target) {
                double sum = -target.image * mean;
                for (std::size_t k = 0; k < nodes.size(); ++k)
                    sum += (target.weights[k] * derivative[k]).real();
                return sum;
            };
            for (std::size_t target = 0; target < targets; ++target)
                by_large_[(l * targets + target) * parts_.size() + p] = value(of[target]);
            for (std::size_t b = 0; b < beside_; ++b)
                beside_by_part[(p * large_.size() + l) * beside_ + b] = value(beside[b]);
        }
    });
    double const count = std::accumulate(counts.begin(), counts.end(), 0.0);
    double const square = std::accumulate(squares.begin(), squares.end(), 0.0);
    auto const points = static_cast<double>(parts_.size() * parts_[0].weight.size());
    effective_share_ = square > 0.0 ? count * count / (square * points) : 1.0;
    beside_by_large_.assign(large_.size() * beside_, 0.0);
    for (std::size_t i = 0; i < beside_by_part.size(); ++i)
        beside_by_large_[i % beside_by_large_.size()] +=
            beside_by_part[i] / static_cast<double>(parts_.size());
}

void Transform::by_name(Stake const& stake, std::span<double> values) const {
    std::ranges::fill(values, 0.0);
    if (!stake.takes_part) return;
    if (is_large(stake)) {
        auto const found = std::ranges::find(large_, stake, &Large::stake);
        auto const from = (found - large_.begin()) * static_cast<std::ptrdiff_t>(values.size());
        std::copy_n(by_large_.begin() + from, values.size(), values.begin());
        return;
    }
    auto const amount = amounts(sums_.form(), stake);
    auto const mixed = cells_->mixed(stake);
    std::size_t const term_count = terms_of(sums_.form());
    std::size_t const kinds = moments_.groups() * lane_count;
    for (std::size_t m = 0; m < mixed.count; ++m) {
        double const* worth =
            &by_cell_[(stake.blend * kinds + mixed.kind[m]) * term_count * values.size()];
        for (std::size_t t = 0; t < term_count; ++t) {
            double const share = mixed.weight[m] * amount[t];
            for (double& value : values) value += share * *worth++;
        }
    }
}

std::span<double const> Transform::beside_of(Stake const& stake) const {
    auto const found = std::ranges::find(large_, stake, &Large::stake);
    auto const l = static_cast<std::size_t>(found - large_.begin());
    return {&beside_by_large_[l * beside_], beside_};
}

}  // namespace model
