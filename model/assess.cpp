#include "model/assess.hpp"

#include "model/simulation.hpp"

#include <algorithm>
#include <cmath>
#include <numeric>
#include <stdexcept>

namespace model {
namespace {

// An atom of the loss at the quantile that holds so many scenarios is conditioned on by itself.
constexpr std::size_t atom_scenarios_min = 30;
// Of a large atom so many scenarios are looked at by name; any of them are a fair sample.
constexpr std::size_t atom_scenarios_max = 10'000;

void ensure(bool holds, char const* what) {
    if (!holds) throw std::logic_error(what);
}

double sum(std::vector<double> const& amounts) {
    return std::accumulate(amounts.begin(), amounts.end(), 0.0);
}

struct Quantile {
    double value = 0.0;
    double error = 0.0;
};

// The smallest x with at least `confidence` of the losses at or below it, and its error from the
// order statistics around it: their ranks are binomial with deviation s. In a lumpy book one s to
// the side may show no change where three do, so the widest of 1, 2 and 3 s counts. A rank beyond
// the last stands for `all_lost`.
Quantile quantile(std::vector<double> losses, double confidence, double all_lost) {
    auto const count = static_cast<double>(losses.size());
    double rank = std::ceil(confidence * count);          // from 1
    if ((rank - 1.0) / count >= confidence) rank -= 1.0;  // the product was rounded up
    double const deviation = std::sqrt(count * confidence * (1.0 - confidence));

    double const lowest = std::max(1.0, rank - std::ceil(3.0 * deviation));
    auto const from = losses.begin() + static_cast<std::ptrdiff_t>(lowest) - 1;
    std::nth_element(losses.begin(), from, losses.end());
    std::sort(from, losses.end());
    auto const at = [&](double order) {
        return order > count ? all_lost
                             : losses[static_cast<std::size_t>(std::max(order, lowest)) - 1];
    };
    Quantile result{.value = at(rank)};
    for (double const steps : {1.0, 2.0, 3.0}) {
        double const side = std::ceil(steps * deviation);
        result.error = std::max(result.error, (at(rank + side) - at(rank - side)) / (2.0 * steps));
    }
    return result;
}

// The scenarios of the tail and of the band.
std::vector<std::uint64_t> choose(std::vector<double> const& losses, double quantile,
                                  double half_width) {
    std::vector<std::uint64_t> chosen;
    std::size_t at_quantile = 0;
    for (std::uint64_t s = 0; s < losses.size(); ++s) {
        if (losses[s] < quantile - half_width) continue;
        if (losses[s] == quantile && ++at_quantile > atom_scenarios_max) continue;
        chosen.push_back(s);
    }
    return chosen;
}

bool in_band(TailSample const& sample, double loss) {
    return std::abs(loss - sample.quantile) <= sample.half_width;
}

// The names' losses in the chosen scenarios, by name.
void gather(TailSample& sample, std::vector<std::vector<Simulation::Move>> const& scenarios,
            std::size_t names) {
    sample.first.assign(names + 1, 0);
    for (auto const& moves : scenarios)
        for (auto const& move : moves) ++sample.first[move.name + 1];
    std::partial_sum(sample.first.begin(), sample.first.end(), sample.first.begin());
    sample.losses.resize(sample.first.back());
    auto next = sample.first;
    for (std::uint32_t s = 0; s < scenarios.size(); ++s)
        for (auto const& [name, amount] : scenarios[s]) sample.losses[next[name]++] = {s, amount};
}

}  // namespace

NameFigures closed_form(Name const& name, Settings const& settings, Migration const& migration) {
    NameFigures figures;
    figures.default_probability = migration.default_probability(name.grade);
    figures.downgrade_probability = migration.downgrade_probability(name.grade);
    double const exposure = name.exposure_at_default.units();
    double const lost = name.loss_at_default;
    if (name.grade == settings.grades.in_default()) {
        figures.expected_loss = lost;
        return figures;
    }

    double const pd = figures.default_probability.value();
    double recovery_variance = 0.0;
    if (double const d = settings.loss_given_default_deviation; d > 0.0 && exposure > 0.0) {
        double const m = std::clamp(lost / exposure, 0.0, 1.0);
        double const m0 = settings.loss_given_default.value();
        recovery_variance = exposure * exposure * m * (1.0 - m) * d * d / (m0 * (1.0 - m0));
    }
    if (settings.loss == LossKind::default_only) {
        figures.expected_loss = pd * lost;
        figures.standalone_loss_deviation =
            std::sqrt(pd * (1.0 - pd) * lost * lost + pd * recovery_variance);
        return figures;
    }

    auto const grades = settings.grade_values.cols();
    Eigen::ArrayXd const probability = migration.matrix().row(name.grade.rank);
    Eigen::ArrayXd loss(grades + 1);
    loss.head(grades) = exposure * settings.grade_values.row(name.grade.rank).transpose().array();
    loss[grades] = lost;
    figures.expected_loss = (probability * loss).sum();
    figures.standalone_loss_deviation = std::sqrt(
        (probability * (loss - figures.expected_loss).square()).sum() + pd * recovery_variance);
    return figures;
}

double Figures::contribution_error(Contribution kind, std::span<std::uint32_t const> members,
                                   double share) const {
    double base = 0.0;
    double at_quantile = 0.0;
    double slope = 0.0;
    double largest = 0.0;
    std::vector<double> loss(sample.total.size(), 0.0);  // the members', a scenario
    for (std::uint32_t const i : members) {
        base += sample.base[i];
        at_quantile += sample.at_quantile[i];
        slope += sample.slope[i];
        largest = std::max(largest, sample.largest[i]);
        for (std::size_t k = sample.first[i]; k < sample.first[i + 1]; ++k)
            loss[sample.losses[k].scenario] += sample.losses[k].amount;
    }
    for (double& amount : loss) amount += base;
    double const largest_of_others =
        members.size() == names.size() ? 0.0 : std::ranges::max(sample.largest);
    // What one more loss does to (members - rate x all): a member's, or another name's.
    auto const one_more = [&](double rate) {
        return std::max(std::abs(1.0 - rate) * largest, std::abs(rate) * largest_of_others);
    };

    // The band gives the members' part of a loss at the quantile: how it spreads around that part,
    // and how the part moves with the quantile.
    double count = 0.0;
    double spreads = 0.0;
    double squares = 0.0;
    for (std::size_t s = 0; s < loss.size(); ++s) {
        if (!in_band(sample, sample.total[s])) continue;
        double const spread = loss[s] - at_quantile - slope * (sample.total[s] - sample.quantile);
        count += 1.0;
        spreads += spread;
        squares += spread * spread;
    }
    double const band_variance =
        (std::max(squares - spreads * spreads / count, 0.0) + std::pow(one_more(slope), 2)) /
        (count * count);
    double const moved = (slope - share) * sample.quantile_error;
    if (kind == Contribution::var) return std::sqrt(band_variance + moved * moved);

    // The shortfall's contribution is a mean over all scenarios of what the tail adds to the part
    // at the quantile, which itself counts for the probability the tail falls short of 1 -
    // confidence.
    count = spreads = squares = 0.0;
    for (std::size_t s = 0; s < loss.size(); ++s) {
        if (sample.total[s] <= sample.quantile) continue;
        double const spread = loss[s] - at_quantile - share * (sample.total[s] - sample.quantile);
        count += 1.0;
        spreads += spread;
        squares += spread * spread;
    }
    auto const scenarios = static_cast<double>(sample.scenarios);
    double const tail = 1.0 - sample.confidence;
    double const mean = spreads / scenarios;
    double const variance = (squares + std::pow(one_more(share), 2)) / scenarios - mean * mean;
    double const short_of_tail = 1.0 - count / (scenarios * tail);
    return std::sqrt(variance / (scenarios * tail * tail) +
                     short_of_tail * short_of_tail * band_variance);
}

Figures assess(Book const& book, unsigned threads) {
    return assess(book.names(), *book.settings(), threads);
}

Figures assess(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
               unsigned threads) {
    Migration const migration{settings};
    Simulation const simulation{names, settings, migration};
    auto const losses = simulation.losses(0, settings.simulation.scenarios, threads);

    Figures figures;
    auto& [totals, measures, plan, sample] = figures;
    std::vector<double> expected(names.size(), 0.0);  // of the loss the simulation draws
    for (std::size_t i = 0; i < names.size(); ++i) {
        measures.push_back(closed_form(*names[i], settings, migration));
        if (names[i]->grade == settings.grades.in_default()) {
            totals.defaulted_loss += measures[i].expected_loss;
        } else {
            expected[i] = measures[i].expected_loss;
            totals.expected_loss += expected[i];
        }
    }

    sample.base = simulation.base();
    sample.largest = simulation.largest();
    sample.scenarios = settings.simulation.scenarios;
    sample.confidence = settings.confidence;
    double const base = sum(sample.base);
    Quantile const found = quantile(losses, settings.confidence, base + sum(sample.largest));
    sample.quantile = found.value;
    sample.quantile_error = found.error;
    totals.loss_quantile = found.value;
    totals.loss_quantile_error = found.error;
    totals.credit_var = found.value - totals.expected_loss;
    totals.credit_var_error = found.error;

    // Contributions to the quantile are means over the atom at it, or over a band of losses around
    // it: 1% of the quantile to either side. Where staying has a value too, what counts is the
    // quantile's distance from the loss if nobody moves, or from the expected loss where that is
    // further. What the band's mean loss is off by goes to the names in proportion to their own
    // distance, so that the sum is exact.
    bool const from_base = std::abs(found.value - base) >= std::abs(totals.credit_var);
    double const distance = from_base ? found.value - base : totals.credit_var;
    std::vector<double> const& origin = from_base ? sample.base : expected;
    auto const atom = static_cast<std::size_t>(std::ranges::count(losses, found.value));
    if (atom < atom_scenarios_min) sample.half_width = plan.band * std::abs(distance);

    auto const chosen = choose(losses, sample.quantile, sample.half_width);
    for (std::uint64_t const s : chosen) sample.total.push_back(losses[s]);
    gather(sample, simulation.moves(chosen, threads), names.size());

    double band_count = 0.0;
    double band_loss = 0.0;
    double tail_count = 0.0;
    double excess = 0.0;  // of the tail's losses over the quantile
    for (double const loss : sample.total) {
        if (in_band(sample, loss)) {
            band_count += 1.0;
            band_loss += loss;
        }
        if (loss > found.value) {
            tail_count += 1.0;
            excess += loss - found.value;
        }
    }
    double const tail = static_cast<double>(sample.scenarios) * (1.0 - settings.confidence);
    totals.expected_shortfall = found.value + excess / tail;
    plan.simulation = settings.simulation;
    plan.band_scenarios = static_cast<std::uint64_t>(band_count);
    if (distance != 0.0)
        plan.band_scale = distance / (band_loss / band_count - (found.value - distance));

    sample.at_quantile.resize(names.size());
    sample.slope.resize(names.size());
    double var_sum = 0.0;
    double es_sum = 0.0;
    for (std::size_t i = 0; i < names.size(); ++i) {
        double band_moves = 0.0;
        double tail_moves = 0.0;
        for (std::size_t k = sample.first[i]; k < sample.first[i + 1]; ++k) {
            auto const& [s, amount] = sample.losses[k];
            if (in_band(sample, sample.total[s])) band_moves += amount;
            if (sample.total[s] > found.value) tail_moves += amount;
        }
        double const own_distance =
            plan.band_scale * (sample.base[i] + band_moves / band_count - origin[i]);
        double const at_quantile = origin[i] + own_distance;
        sample.at_quantile[i] = at_quantile;
        if (distance != 0.0) sample.slope[i] = own_distance / distance;
        measures[i].var_contribution = at_quantile - expected[i];
        measures[i].es_contribution =
            at_quantile + (tail_moves + tail_count * (sample.base[i] - at_quantile)) / tail;
        var_sum += measures[i].var_contribution;
        es_sum += measures[i].es_contribution;
    }
    double const rounding = 1e-9 * (std::abs(base) + sum(sample.largest));
    ensure(std::abs(var_sum - totals.credit_var) <= rounding,
           "contributions do not sum to credit VaR");
    ensure(std::abs(es_sum - totals.expected_shortfall) <= rounding,
           "contributions do not sum to expected shortfall");

    std::vector<std::uint32_t> everyone(names.size());
    std::iota(everyone.begin(), everyone.end(), 0U);
    totals.expected_shortfall_error = figures.contribution_error(Contribution::es, everyone, 0.0);
    for (std::uint32_t const i : everyone) {
        std::span const one{&i, 1};
        measures[i].var_contribution_error =
            figures.contribution_error(Contribution::var, one, 0.0);
        measures[i].es_contribution_error = figures.contribution_error(Contribution::es, one, 0.0);
    }
    return figures;
}

}  // namespace model
