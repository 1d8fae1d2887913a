#include "model/simulation.hpp"

#include <Random123/philox.h>
#include <boost/random/exponential_distribution.hpp>
#include <boost/random/gamma_distribution.hpp>
#include <boost/random/normal_distribution.hpp>
#include <boost/random/uniform_01.hpp>
#include <oneapi/tbb/blocked_range.h>
#include <oneapi/tbb/global_control.h>
#include <oneapi/tbb/parallel_for.h>
#include <oneapi/tbb/task_arena.h>

#include <algorithm>
#include <cmath>
#include <limits>
#include <map>

namespace model {
namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();

// An index further out (one scenario in 1e15) is taken to stand here.
constexpr double index_max = 8.0;
constexpr int bins_per_deviation = 32;
constexpr std::size_t bins = 2 * static_cast<std::size_t>(index_max) * bins_per_deviation;

// A name stays with a probability of at least exp(-40), which is 4e-18.
constexpr double hazard_max = 40.0;

constexpr std::size_t scenarios_per_block = 256;

std::size_t bin_of(double index) {
    return std::min(static_cast<std::size_t>((index + index_max) * bins_per_deviation), bins - 1);
}

double lower_edge(std::size_t bin) {
    return static_cast<double>(bin) / bins_per_deviation - index_max;
}

constexpr std::uint32_t none = std::numeric_limits<std::uint32_t>::max();

// The first element of an ascending, not empty range that is above x, which its last is. Without a
// branch to mispredict, unlike std::upper_bound.
std::size_t first_beyond(std::vector<double> const& ascending, double x) {
    double const* begin = ascending.data();
    std::size_t left = ascending.size();
    while (left > 1) {
        std::size_t const half = left / 2;
        begin += half * static_cast<std::size_t>(begin[half - 1] <= x);
        left -= half;
    }
    return static_cast<std::size_t>(begin - ascending.data());
}

// Calls `work(from, to)` for the blocks that [0, count) falls into.
template <class Work>
void in_blocks(std::size_t count, unsigned threads, Work const& work) {
    auto const allowed =
        tbb::global_control::active_value(tbb::global_control::max_allowed_parallelism);
    auto const used = threads == 0 ? allowed : std::min<std::size_t>(threads, allowed);
    tbb::task_arena arena{static_cast<int>(used)};
    arena.execute([&] {
        tbb::parallel_for(tbb::blocked_range<std::size_t>{0, count, scenarios_per_block},
                          [&](auto const& block) { work(block.begin(), block.end()); });
    });
}

}  // namespace

// The random numbers of one scenario, in the order they are asked for: a uniform random bit
// generator, and the distributions drawn from it.
class Simulation::Stream {
public:
    using result_type = std::uint64_t;
    static constexpr result_type min() { return 0; }
    static constexpr result_type max() { return std::numeric_limits<result_type>::max(); }

    Stream(std::uint64_t seed, std::uint64_t scenario)
        : key_{{low(seed), high(seed)}}, counter_{{low(scenario), high(scenario), 0, 0}} {}

    result_type operator()() {
        if (unused_ == 0) {
            words_ = r123::Philox4x32{}(counter_, key_);
            ++counter_[3];
            unused_ = words_.size();
        }
        unused_ -= 2;
        return words_[unused_] | result_type{words_[unused_ + 1]} << 32U;
    }

    double uniform() { return boost::random::uniform_01<>{}(*this); }
    double normal() { return boost::random::normal_distribution<>{}(*this); }
    double exponential() { return boost::random::exponential_distribution<>{}(*this); }

    // Beta distributed, as a ratio of gamma variables in logarithms, which hold for any a, b > 0.
    double beta(double a, double b) {
        return 1.0 / (1.0 + std::exp(log_gamma_variable(b) - log_gamma_variable(a)));
    }

private:
    static std::uint32_t low(std::uint64_t word) { return static_cast<std::uint32_t>(word); }
    static std::uint32_t high(std::uint64_t word) { return static_cast<std::uint32_t>(word >> 32U); }

    // G(a) = G(a + 1) U^(1/a): Devroye (1986), Non-uniform random variate generation, IX.3.
    double log_gamma_variable(double a) {
        double const above = boost::random::gamma_distribution<>{a + 1.0}(*this);
        return std::log(above) - exponential() / a;
    }

    r123::Philox4x32::key_type key_;
    r123::Philox4x32::ctr_type counter_;  // scenario, 0, blocks drawn
    r123::Philox4x32::ctr_type words_{};
    std::size_t unused_ = 0;  // of words_
};

Simulation::Simulation(std::span<std::shared_ptr<Name const> const> names,
                       Settings const& settings, Migration const& migration)
    : settings_{settings},
      migration_{migration},
      factor_{factor(settings.indices.correlation)},
      stakes_(names.size()),
      base_(names.size()),
      largest_(names.size()) {
    bool const revalued = settings.loss == LossKind::revaluation;
    std::size_t const grades = settings.grades.size();
    if (double const d = settings.loss_given_default_deviation; d > 0.0) {
        double const m = settings.loss_given_default.value();
        precision_ = m * (1.0 - m) / (d * d) - 1.0;
    }

    std::map<Kind, std::uint32_t> kinds;
    std::map<Blend, std::map<std::uint32_t, std::vector<std::uint32_t>>> by_blend_and_kind;
    double total = 0.0;
    for (std::uint32_t i = 0; i < names.size(); ++i) {
        Name const& name = *names[i];
        Grade const grade = name.grade;
        if (grade.rank >= grades) continue;

        auto& [exposure, loss, steps_if_lost] = stakes_[i];
        exposure = name.exposure_at_default.units();
        loss = name.loss_at_default;
        if (revalued) base_[i] = exposure * settings.grade_values(grade.rank, grade.rank);
        for (std::size_t state = revalued ? 0 : grades; state <= grades; ++state) {
            auto const column = static_cast<Eigen::Index>(state);
            if (state == grade.rank || migration.matrix()(grade.rank, column) <= 0.0) continue;
            double const most = state < grades ? exposure * settings.grade_values(grade.rank, column)
                                : precision_ > 0.0 && loss > 0.0 ? exposure
                                                                 : loss;
            largest_[i] = std::max(largest_[i], std::abs(most - base_[i]));
        }
        total += std::abs(base_[i]) + largest_[i];
        if (largest_[i] == 0.0) continue;

        auto const& cuts = migration.thresholds(grade);  // worst state first
        Kind const kind{.grade = grade.rank,
                        .asset_correlation =
                            name.asset_correlation.value_or(settings.asset_correlation[grade.rank]),
                        .cut_down = cuts[revalued ? grades - 1 - grade.rank : 0],
                        .cut_up = revalued && grade.rank > 0 ? cuts[grades - grade.rank] : infinity};
        auto const [place, is_new] =
            kinds.try_emplace(kind, static_cast<std::uint32_t>(kinds_.size()));
        if (is_new) kinds_.push_back(kind);
        by_blend_and_kind[blend(settings, name.sector, name.country)][place->second].push_back(i);
    }

    for (auto const& [blend, by_kind] : by_blend_and_kind) {
        for (auto const& [kind, members] : by_kind) {
            cells_.push_back({.blend = static_cast<std::uint32_t>(blends_.size()),
                              .kind = kind,
                              .first_member = static_cast<std::uint32_t>(members_.size()),
                              .members = static_cast<std::uint32_t>(members.size())});
            members_.insert(members_.end(), members.begin(), members.end());
        }
        blends_.push_back(blend);
    }

    // Downward moves are likeliest at the bin's lower edge, upward ones at its upper edge. A hair is
    // added so that rounding cannot put a bound on the wrong side of the hazard.
    for (std::size_t bin = 0; bin < bins; ++bin)
        for (Kind const& kind : kinds_) {
            double const low = lower_edge(bin);
            double const high = lower_edge(bin + 1);
            hazard_above_.push_back(hazard(kind, low, high) * (1.0 + 1e-9));
            hazard_below_.push_back(hazard(kind, high, low) * (1.0 - 1e-9));
        }

    // At most 1e15 steps in all, which a double counts exactly.
    if (total > 0.0) steps_per_unit_ = std::pow(10.0, std::min(15.0 - std::ceil(std::log10(total)), 15.0));
    for (std::size_t i = 0; i < names.size(); ++i) {
        stakes_[i].steps_if_lost = steps(stakes_[i].loss_at_default) - steps(base_[i]);
        base_steps_ += steps(base_[i]);
        base_[i] = steps(base_[i]) / steps_per_unit_;
    }
    certain_ = !revalued && precision_ == 0.0;
}

double Simulation::steps(double loss) const { return std::nearbyint(loss * steps_per_unit_); }

double Simulation::hazard(Kind const& kind, double index_down, double index_up) {
    double const rho = kind.asset_correlation;
    double const down = probability_below(kind.cut_down, rho, index_down);
    double const up = probability_below(-kind.cut_up, rho, -index_up);
    if (down + up <= 0.5) return -std::log1p(-(down + up));

    double const stay = down > 0.5
                            ? probability_below(-kind.cut_down, rho, -index_down) - up
                            : probability_below(kind.cut_up, rho, index_up) - down;
    return stay > 0.0 ? std::min(-std::log(stay), hazard_max) : hazard_max;
}

std::size_t Simulation::state_after(Kind const& kind, double index, Stream& stream) const {
    std::size_t const grades = settings_.grades.size();
    if (settings_.loss == LossKind::default_only) return grades;

    auto const& cuts = migration_.thresholds(Grade{kind.grade});  // worst state first
    double const rho = kind.asset_correlation;
    double const down = probability_below(kind.cut_down, rho, index);
    double const up = probability_below(-kind.cut_up, rho, -index);
    double const place = stream.uniform() * (down + up);
    if (place < down) {  // from default upwards
        std::size_t state = grades;
        while (state > kind.grade + 1U &&
               place >= probability_below(cuts[grades - state], rho, index))
            --state;
        return state;
    }
    std::size_t state = 0;  // from the best grade downwards
    while (state + 1U < kind.grade &&
           place - down >= probability_below(-cuts[grades - 1 - state], rho, -index))
        ++state;
    return state;
}

double Simulation::drawn(std::uint32_t name, Kind const& kind, double index,
                         Stream& stream) const {
    auto const [exposure, loss, steps_if_lost] = stakes_[name];
    std::size_t const state = state_after(kind, index, stream);
    if (state < settings_.grades.size()) {
        double const value = settings_.grade_values(kind.grade, static_cast<Eigen::Index>(state));
        return steps(exposure * value) - steps(base_[name]);
    }
    if (precision_ == 0.0 || loss <= 0.0 || loss >= exposure) return steps_if_lost;
    double const mean = loss / exposure;
    double const lost = stream.beta(mean * precision_, (1.0 - mean) * precision_);
    return steps(exposure * lost) - steps(base_[name]);
}

Simulation::Scratch Simulation::scratch() const {
    return {.factors = Eigen::VectorXd(factor_.cols()),
            .indices = Eigen::VectorXd(factor_.rows()),
            .index = std::vector<double>(blends_.size()),
            .row = std::vector<std::size_t>(blends_.size()),
            .ends = std::vector<double>(cells_.size()),
            .points = {}};
}

// Tells `visit` each name that moves, and its loss beyond that of staying.
template <class Visit>
void Simulation::run(std::uint64_t scenario, Scratch& scratch, Visit const& visit) const {
    auto& [factors, indices, index, row, ends, points] = scratch;
    Stream stream{settings_.simulation.seed, scenario};
    for (double& factor : factors) factor = stream.normal();
    indices.noalias() = factor_ * factors;
    for (std::size_t b = 0; b < blends_.size(); ++b) {
        auto const& [first, second, first_weight, second_weight] = blends_[b];
        index[b] = std::clamp(first_weight * indices[first] + second_weight * indices[second],
                              -index_max, index_max);
        row[b] = bin_of(index[b]) * kinds_.size();
    }

    double end = 0.0;
    for (std::size_t c = 0; c < cells_.size(); ++c) {
        Cell const& cell = cells_[c];
        end += cell.members * hazard_above_[row[cell.blend] + cell.kind];
        ends[c] = end;
    }

    points.clear();
    for (double point = stream.exponential(); point < end; point += stream.exponential())
        points.push_back(point);

    std::uint32_t moved = none;
    for (double const point : points) {
        std::size_t const c = first_beyond(ends, point);
        auto const& [blend, kind, first_member, members] = cells_[c];
        std::size_t const bounds = row[blend] + kind;
        double const length = hazard_above_[bounds];
        double const beyond = point - (ends[c] - members * length);
        auto const member = std::min(static_cast<std::uint32_t>(std::max(beyond, 0.0) / length), members - 1);
        double const place = beyond - member * length;
        std::uint32_t const name = members_[first_member + member];
        if (name == moved) continue;
        if (place >= hazard_below_[bounds] &&
            place >= hazard(kinds_[kind], index[blend], index[blend]))
            continue;
        moved = name;
        visit(name, certain_ ? stakes_[name].steps_if_lost : drawn(name, kinds_[kind], index[blend], stream));
    }
}

std::vector<double> Simulation::losses(std::uint64_t first, std::size_t count,
                                       unsigned threads) const {
    std::vector<double> result(count);
    in_blocks(count, threads, [&](std::size_t from, std::size_t to) {
        Scratch room = scratch();
        for (std::size_t s = from; s < to; ++s) {
            double steps = base_steps_;
            run(first + s, room, [&steps](std::uint32_t, double moved) { steps += moved; });
            result[s] = steps / steps_per_unit_;
        }
    });
    return result;
}

std::vector<std::vector<Simulation::Move>> Simulation::moves(
    std::span<std::uint64_t const> scenarios, unsigned threads) const {
    std::vector<std::vector<Move>> result(scenarios.size());
    in_blocks(scenarios.size(), threads, [&](std::size_t from, std::size_t to) {
        Scratch room = scratch();
        for (std::size_t s = from; s < to; ++s)
            run(scenarios[s], room, [&](std::uint32_t name, double moved) {
                result[s].push_back({name, moved / steps_per_unit_});
            });
    });
    return result;
}

}  // namespace model
