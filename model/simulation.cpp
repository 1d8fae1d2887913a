#include "model/simulation.hpp"

#include "model/parallel.hpp"

#include <Random123/philox.h>
#include <boost/math/special_functions/beta.hpp>
#include <boost/random/exponential_distribution.hpp>
#include <boost/random/gamma_distribution.hpp>
#include <boost/random/normal_distribution.hpp>
#include <boost/random/uniform_01.hpp>

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

}  // namespace

FactorLaw::FactorLaw(Eigen::MatrixXd means, std::vector<int> const& sixteenths)
    : means_{std::move(means)},
      shares_{means_.cols()},
      half_squares_{0.5 * means_.colwise().squaredNorm().transpose()} {
    std::size_t stratum = 0;
    for (std::size_t k = 0; k < sixteenths.size(); ++k) {
        shares_[static_cast<Eigen::Index>(k)] = sixteenths[k] / double{strata};
        for (int i = 0; i < sixteenths[k]; ++i)
            component_.at(stratum++) = static_cast<std::uint8_t>(k);
    }
}

void FactorLaw::shift(Eigen::VectorXd& factors, std::uint64_t scenario) const {
    if (!plain()) factors += means_.col(component_[scenario % strata]);
}

double FactorLaw::weight(Eigen::VectorXd const& factors) const {
    if (plain()) return 1.0;
    double ratio = 0.0;  // g / phi
    for (Eigen::Index k = 0; k < means_.cols(); ++k)
        ratio += shares_[k] * std::exp(means_.col(k).dot(factors) - half_squares_[k]);
    return 1.0 / ratio;
}

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
                       Migration const& migration, std::uint64_t seed)
    : settings_{settings},
      migration_{migration},
      seed_{seed},
      factor_{factor(settings.indices.correlation)},
      cell_of_(names.size(), none),
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
        for (std::uint32_t const i : those)
            cell_of_[i] = static_cast<std::uint32_t>(cells_.size()) - 1;
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

double Simulation::index_of(Blend const& blend, Eigen::VectorXd const& indices) {
    return std::clamp(
        blend.first_weight * indices[blend.first] + blend.second_weight * indices[blend.second],
        -index_max, index_max);
}

void Simulation::find_ways(Kind const& kind, double index, Ways& ways) const {
    if (settings_.loss == LossKind::default_only) return;
    ways.index = index;
    ways.down = probability_below(kind.cut_down, kind.asset_correlation, index);
    ways.up = probability_below(-kind.cut_up, kind.asset_correlation, -index);
    std::ranges::fill(ways.further, -1.0);
}

double Simulation::further(Kind const& kind, std::size_t state, Ways& ways) const {
    double& probability = ways.further[state];
    if (probability >= 0.0) return probability;
    auto const& cuts = migration_.thresholds(Grade{kind.grade});  // worst state first
    std::size_t const grades = settings_.grades.size();
    double const rho = kind.asset_correlation;
    return probability = state > kind.grade
                             ? probability_below(cuts[grades - 1 - state], rho, ways.index)
                             : probability_below(-cuts[grades - state], rho, -ways.index);
}

double Simulation::steps_of_move(std::uint32_t name, Kind const& kind, Ways& ways,
                                 Stream& stream) const {
    auto const& [exposure, loss, steps_on_default] = stakes_[name];
    if (one_amount_) return steps_on_default;
    std::size_t const grades = settings_.grades.size();
    std::size_t state = grades;
    if (settings_.loss == LossKind::revaluation) {
        double const place = stream.uniform() * (ways.down + ways.up);
        state = kind.grade;
        if (place < ways.down || ways.up == 0.0) {
            do ++state;
            while (state < grades && place < further(kind, state, ways));
        } else {
            do --state;
            while (state > 0 && place - ways.down < further(kind, state, ways));
        }
    }
    if (state < grades) {
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
            .ways = {.further = std::vector<double>(settings_.grades.size())}};
}

void Simulation::draw_factors(FactorLaw const& law, std::uint64_t scenario, Stream& stream,
                              Eigen::VectorXd& factors) {
    for (double& factor : factors) factor = stream.normal();
    law.shift(factors, scenario);
}

// Tells `on_move` each name that moves, and the steps its loss moves by.
template <class OnMove>
void Simulation::run(FactorLaw const& law, std::uint64_t scenario, Scratch& scratch,
                     OnMove const& on_move) const {
    auto& [factors, indices, index, row, ways] = scratch;
    Stream stream{seed_, scenario};
    draw_factors(law, scenario, stream, factors);
    indices.noalias() = factor_ * factors;
    for (std::size_t b = 0; b < blends_.size(); ++b) {
        index[b] = index_of(blends_[b], indices);
        row[b] = bin_of(index[b]) * kinds_.size();
    }

    std::uint32_t moved = none;
    double gap = stream.exponential();  // from where the cell begins to the next point
    for (auto const& [blend, kind, first_member, members] : cells_) {
        double const length = hazard_above_[row[blend] + kind];
        double const end = members * length;
        if (gap < end) {
            double const surely_hit = hazard_below_[row[blend] + kind];
            find_ways(kinds_[kind], index[blend], ways);
            do {
                auto const member = std::min(static_cast<std::uint32_t>(gap / length), members - 1);
                double const in_name = gap - member * length;
                std::uint32_t const name = members_[first_member + member];
                gap += stream.exponential();
                if (name == moved) continue;
                if (in_name >= surely_hit &&
                    in_name >= hazard(kinds_[kind], index[blend], index[blend]))
                    continue;
                moved = name;
                on_move(name, steps_of_move(name, kinds_[kind], ways, stream));
            } while (gap < end);
        }
        gap -= end;
    }
}

Simulation::Sample Simulation::sample(FactorLaw const& law, std::uint64_t first, std::size_t count,
                                      unsigned threads) const {
    Sample result;
    result.loss.resize(count);
    if (!law.plain()) result.weight.resize(count);
    in_blocks(count, scenarios_per_block, threads, [&](std::size_t from, std::size_t to) {
        Scratch room = scratch();
        for (std::size_t s = from; s < to; ++s) {
            double steps = base_steps_;
            run(law, first + s, room, [&steps](std::uint32_t, double moved) { steps += moved; });
            result.loss[s] = steps / steps_per_unit_;
            if (!law.plain()) result.weight[s] = law.weight(room.factors);
        }
    });
    return result;
}

void Simulation::visit(FactorLaw const& law, std::span<std::uint64_t const> scenarios,
                       Visit const& visit) const {
    Scratch room = scratch();
    std::vector<Move> moves;
    for (std::size_t k = 0; k < scenarios.size(); ++k) {
        moves.clear();
        run(law, scenarios[k], room, [&](std::uint32_t name, double moved) {
            moves.push_back({name, moved / steps_per_unit_});
        });
        visit(k, moves, room.indices);
    }
}

std::vector<std::vector<Simulation::Move>> Simulation::moves(
    std::span<std::uint64_t const> scenarios, unsigned threads) const {
    std::vector<std::vector<Move>> result(scenarios.size());
    in_blocks(scenarios.size(), scenarios_per_block, threads,
              [&](std::size_t from, std::size_t to) {
                  visit({}, scenarios.subspan(from, to - from),
                        [&](std::size_t k, std::span<Move const> moves, Eigen::VectorXd const&) {
                            result[from + k].assign(moves.begin(), moves.end());
                        });
              });
    return result;
}

double Simulation::expected_move(std::uint32_t name, Eigen::VectorXd const& indices, double low,
                                 double high) const {
    if (cell_of_[name] == none || low > largest_[name] || high < -largest_[name]) return 0.0;
    auto const& [exposure, loss, steps_on_default] = stakes_[name];
    Cell const& cell = cells_[cell_of_[name]];
    Kind const& kind = kinds_[cell.kind];
    double const index = index_of(blends_[cell.blend], indices);
    double const rho = kind.asset_correlation;
    auto const& cuts = migration_.thresholds(Grade{kind.grade});  // worst state first
    auto const between = [&](double amount) {
        return low <= amount && amount <= high ? amount : 0.0;
    };

    double const p = probability_below(cuts.front(), rho, index);
    double expected = 0.0;
    if (precision_ > 0.0 && loss > 0.0 && loss < exposure) {
        double const mean = loss / exposure;
        double const a = mean * precision_;
        double const b = (1.0 - mean) * precision_;
        double const from = std::clamp((low + base_[name]) / exposure, 0.0, 1.0);
        double const to = std::clamp((high + base_[name]) / exposure, 0.0, 1.0);
        // E[x; x <= c] of a beta variable x is its mean times I_c(a + 1, b).
        if (from < to)
            expected =
                p * (loss * (boost::math::ibeta(a + 1.0, b, to) -
                             boost::math::ibeta(a + 1.0, b, from)) -
                     base_[name] * (boost::math::ibeta(a, b, to) - boost::math::ibeta(a, b, from)));
    } else {
        expected = p * between(loss - base_[name]);
    }
    if (settings_.loss == LossKind::default_only) return expected;

    std::size_t const grades = settings_.grades.size();
    for (std::size_t state = 0; state < grades; ++state) {
        if (state == kind.grade) continue;
        double const value = settings_.grade_values(kind.grade, static_cast<Eigen::Index>(state));
        double const amount = between(exposure * value - base_[name]);
        if (amount == 0.0) continue;
        double const lower = cuts[grades - 1 - state];
        double const upper = state == 0 ? infinity : cuts[grades - state];
        expected +=
            amount *
            (state > kind.grade
                 ? probability_below(upper, rho, index) - probability_below(lower, rho, index)
                 : probability_below(-lower, rho, -index) - probability_below(-upper, rho, -index));
    }
    return expected;
}

Eigen::VectorXd Simulation::factors(FactorLaw const& law, std::uint64_t scenario) const {
    Stream stream{seed_, scenario};
    Eigen::VectorXd factors(factor_.cols());
    draw_factors(law, scenario, stream, factors);
    return factors;
}

}  // namespace model
