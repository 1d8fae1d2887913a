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
#include <utility>

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
        begin += half & -static_cast<std::size_t>(begin[half - 1] <= x);
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
    static std::uint32_t high(std::uint64_t word) {
        return static_cast<std::uint32_t>(word >> 32U);
    }

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

Simulation::Simulation(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
                       Migration const& migration)
    : settings_{settings},
      migration_{migration},
      factor_{factor(settings.indices.correlation)},
      stakes_(names.size()),
      base_(names.size()),
      largest_(names.size()) {
    if (double const d = settings.loss_given_default_deviation; d > 0.0) {
        double const m = settings.loss_given_default.value();
        precision_ = m * (1.0 - m) / (d * d) - 1.0;
    }
    if (settings.loss == LossKind::default_only && precision_ == 0.0) one_amount_ = true;

    using Indices = std::pair<std::uint32_t, std::uint32_t>;
    using GradeAndCorrelation = std::pair<std::uint8_t, double>;
    std::map<std::pair<Indices, GradeAndCorrelation>, std::vector<std::uint32_t>> members;
    for (std::uint32_t i = 0; i < names.size(); ++i) {
        Name const& name = *names[i];
        if (name.grade == settings.grades.in_default()) continue;
        stakes_[i] = {.exposure_at_default = name.exposure_at_default.units(),
                      .loss_at_default = name.loss_at_default};
        if (settings.loss == LossKind::revaluation)
            base_[i] = stakes_[i].exposure_at_default *
                       settings.grade_values(name.grade.rank, name.grade.rank);
        largest_[i] = largest_move(i, name.grade);
        if (largest_[i] == 0.0) continue;

        Blend const indices = blend(settings, name.sector, name.country);
        double const asset_correlation =
            name.asset_correlation.value_or(settings.asset_correlation[name.grade.rank]);
        members[{{indices.first, indices.second}, {name.grade.rank, asset_correlation}}].push_back(
            i);
    }

    std::map<Indices, std::uint32_t> blends;
    std::map<GradeAndCorrelation, std::uint32_t> kinds;
    for (auto const& [key, those] : members) {
        auto const& [indices, grade_and_correlation] = key;
        Name const& name = *names[those.front()];
        auto const blend_number = static_cast<std::uint32_t>(blends_.size());
        auto const [blend_at, new_blend] = blends.try_emplace(indices, blend_number);
        if (new_blend) blends_.push_back(blend(settings, name.sector, name.country));
        auto const kind_number = static_cast<std::uint32_t>(kinds_.size());
        auto const [kind_at, new_kind] = kinds.try_emplace(grade_and_correlation, kind_number);
        if (new_kind) kinds_.push_back(kind(name.grade, grade_and_correlation.second));
        cells_.push_back({.blend = blend_at->second,
                          .kind = kind_at->second,
                          .first_member = static_cast<std::uint32_t>(members_.size()),
                          .members = static_cast<std::uint32_t>(those.size())});
        members_.insert(members_.end(), those.begin(), those.end());
    }

    // Downward moves are likeliest at the bin's lower edge, upward ones at its upper edge. A hair
    // is added so that rounding cannot put a bound on the wrong side of the hazard.
    for (std::size_t bin = 0; bin < bins; ++bin)
        for (Kind const& kind : kinds_) {
            double const low = lower_edge(bin);
            double const high = lower_edge(bin + 1);
            hazard_above_.push_back(hazard(kind, low, high) * (1.0 + 1e-9));
            hazard_below_.push_back(hazard(kind, high, low) * (1.0 - 1e-9));
        }

    // At most 1e15 steps in all, which a double counts exactly.
    double total = 0.0;
    for (std::size_t i = 0; i < names.size(); ++i) total += std::abs(base_[i]) + largest_[i];
    if (total > 0.0)
        steps_per_unit_ = std::pow(10.0, std::min(15.0 - std::ceil(std::log10(total)), 15.0));
    for (std::size_t i = 0; i < names.size(); ++i) {
        stakes_[i].steps_on_default = steps(stakes_[i].loss_at_default) - steps(base_[i]);
        base_steps_ += steps(base_[i]);
        base_[i] = steps(base_[i]) / steps_per_unit_;
    }
}

double Simulation::largest_move(std::uint32_t name, Grade from) const {
    auto const reachable = [&](std::size_t state) {
        return migration_.matrix()(from.rank, static_cast<Eigen::Index>(state)) > 0.0;
    };
    auto const& [exposure, loss, steps_on_default] = stakes_[name];
    std::size_t const grades = settings_.grades.size();
    double largest = 0.0;
    if (reachable(grades)) {
        double const most = precision_ > 0.0 && loss > 0.0 ? exposure : loss;
        largest = std::abs(most - base_[name]);
    }
    if (settings_.loss == LossKind::revaluation)
        for (std::size_t state = 0; state < grades; ++state) {
            if (state == from.rank || !reachable(state)) continue;
            double const value =
                settings_.grade_values(from.rank, static_cast<Eigen::Index>(state));
            largest = std::max(largest, std::abs(exposure * value - base_[name]));
        }
    return largest;
}

Simulation::Kind Simulation::kind(Grade grade, double asset_correlation) const {
    std::size_t const grades = settings_.grades.size();
    auto const& cuts = migration_.thresholds(grade);  // worst state first
    Kind kind{.grade = grade.rank,
              .asset_correlation = asset_correlation,
              .cut_down = cuts.front(),
              .cut_up = infinity};
    if (settings_.loss == LossKind::revaluation) {
        kind.cut_down = cuts[grades - 1 - grade.rank];
        if (grade.rank > 0) kind.cut_up = cuts[grades - grade.rank];
    }
    return kind;
}

double Simulation::steps(double loss) const {
    return std::nearbyint(loss * steps_per_unit_);
}

double Simulation::hazard(Kind const& kind, double index_down, double index_up) {
    double const rho = kind.asset_correlation;
    double const down = probability_below(kind.cut_down, rho, index_down);
    double const up = probability_below(-kind.cut_up, rho, -index_up);
    if (down + up <= 0.5) return -std::log1p(-(down + up));

    double const stay = down > 0.5 ? probability_below(-kind.cut_down, rho, -index_down) - up
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
    std::size_t state = kind.grade;
    if (place < down || up == 0.0) {
        do ++state;
        while (state < grades && place < probability_below(cuts[grades - 1 - state], rho, index));
    } else {
        do --state;
        while (state > 0 && place - down < probability_below(-cuts[grades - state], rho, -index));
    }
    return state;
}

double Simulation::steps_of_move(std::uint32_t name, Kind const& kind, double index,
                                 Stream& stream) const {
    auto const& [exposure, loss, steps_on_default] = stakes_[name];
    if (one_amount_) return steps_on_default;
    std::size_t const state = state_after(kind, index, stream);
    if (state < settings_.grades.size()) {
        double const value = settings_.grade_values(kind.grade, static_cast<Eigen::Index>(state));
        return steps(exposure * value) - steps(base_[name]);
    }
    if (precision_ == 0.0 || loss <= 0.0 || loss >= exposure) return steps_on_default;
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

// Tells `visit` each name that moves, and the steps its loss moves by.
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

    // In three goes, so that searches overlap in the processor: where the points fall, in which
    // cells, on whom.
    points.clear();
    double next = stream.exponential();
    while (next < end) {
        points.push_back({.place = next});
        next += stream.exponential();
    }
    for (Point& point : points) point.cell = first_beyond(ends, point.place);

    std::uint32_t moved = none;
    for (auto const& [place, c] : points) {
        auto const& [blend, kind, first_member, members] = cells_[c];
        double const length = hazard_above_[row[blend] + kind];
        double const in_cell = std::max(place - (ends[c] - members * length), 0.0);
        auto const member = std::min(static_cast<std::uint32_t>(in_cell / length), members - 1);
        double const in_name = in_cell - member * length;
        std::uint32_t const name = members_[first_member + member];
        if (name == moved) continue;
        if (in_name >= hazard_below_[row[blend] + kind] &&
            in_name >= hazard(kinds_[kind], index[blend], index[blend]))
            continue;
        moved = name;
        visit(name, steps_of_move(name, kinds_[kind], index[blend], stream));
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
