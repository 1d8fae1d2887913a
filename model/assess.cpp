#include "model/assess.hpp"

#include "model/parallel.hpp"
#include "model/pilot.hpp"
#include "model/transform.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <numeric>
#include <utility>

namespace model {
namespace {

// What a plan may leave out: of the quantile, over what the shortfall is beyond the expected loss;
// images, of the tail.
constexpr double smoothing_max = 2e-4;
constexpr double fourth_max = 1e-4;
constexpr double image_max = 1e-4;
// A plan found just now is refined until it strains no more than this.
constexpr double fresh_strain_max = 0.5;
// Beyond these, refining costs more than it is worth: nodes, and factors of large names in all.
constexpr std::uint32_t nodes_max = 4096;
constexpr double work_max = 3e8;
constexpr std::uint32_t points_min = 16;  // of the smallest component
// So far away, in widths, a window has let an atom out of the tail or into it.
constexpr double atom_widths = 3.0;
// A fourth derivative is taken for no less than this part of an exponential tail's.
constexpr double fourth_part_min = 0.1;
// More changes at once, or since it was built, and the transform is built anew.
constexpr std::size_t changed_max = 32;
constexpr std::size_t updates_max = 1000;
constexpr std::size_t names_per_task = 1024;

// What a pass found, by which a plan is judged.
struct Fitness {
    double smoothing = 0.0;  // by the window
    double fourth = 0.0;     // by cumulants that end with the third
    double image = 0.0;      // by a period that ends
    double effective_share = 1.0;
};

// What a plan leaves out over what one may leave out, the largest.
double strain(Fitness const& fitness) {
    return std::max({fitness.image / image_max, fitness.smoothing / smoothing_max,
                     fitness.fourth / fourth_max});
}

// What is wrong with a plan that strains more than it may, if anything.
std::string unfit(Fitness const& fitness, Plan const& plan, double strain_max) {
    if (fitness.effective_share < 0.5 * plan.effective_share)
        return "too few of the points lie in the tail";
    if (strain(fitness) <= strain_max) return {};
    if (fitness.image > strain_max * image_max) return "the period is too short for the tail";
    if (fitness.smoothing > strain_max * smoothing_max)
        return "the window is too wide for the loss";
    return "too few names have a factor of their own";
}

// A plan that cures what is wrong with this one; nothing where that would cost too much.
std::optional<Plan> refined(Plan plan, Fitness const& fitness, std::size_t large) {
    if (plan.inversion == Inversion::lattice) return std::nullopt;
    if (fitness.image > fresh_strain_max * image_max) {
        plan.period *= 1.5;
        plan.damping = 1.0 / plan.period;
        plan.nodes = static_cast<std::uint32_t>(1.5 * plan.nodes);
    } else if (fitness.smoothing > fresh_strain_max * smoothing_max) {
        plan.width /= 2.0;
        plan.nodes *= 2;
    } else if (fitness.fourth > fresh_strain_max * fourth_max) {
        plan.large_from /= 2.0;
        large *= 2;
    } else {
        return std::nullopt;
    }
    if (plan.nodes > nodes_max) return std::nullopt;
    auto const work = [&] {
        double points = 0.0;
        for (auto const& component : plan.mixture) points += component.points;
        return points * plan.scramblings * plan.nodes * static_cast<double>(large);
    };
    while (work() > work_max && plan.mixture.back().points > points_min)
        for (auto& component : plan.mixture) component.points /= 2;
    if (work() > work_max) return std::nullopt;
    return plan;
}

template <class Work>
void each_of(std::size_t count, unsigned threads, Work const& work) {
    in_blocks(count, names_per_task, threads, [&](std::size_t from, std::size_t to) {
        for (std::size_t i = from; i < to; ++i) work(i);
    });
}

// Of a name's loss in the tail, by its mean there and the size of its largest move, as if it had
// but that.
double fourth_cumulant(double mean, double largest) {
    double const p = std::min(mean / largest, 1.0);
    return p * (1.0 - p) * (1.0 - 6.0 * p * (1.0 - p)) * std::pow(largest, 4);
}

// What errors are small or large beside.
double scale_of(double expected_shortfall, double expected_loss) {
    return std::max(std::abs(expected_shortfall - expected_loss), 1e-300);
}

Fitness fitness_of(LossCurve const& curve, Settings const& settings, double expected_loss) {
    double const beyond = 1.0 - settings.confidence;
    double const shortfall = curve.expected_shortfall(settings.confidence);
    return {.smoothing = curve.smoothing(settings.confidence) / scale_of(shortfall, expected_loss),
            .image = curve.image_bound() / beyond};
}

double mean_of(std::span<double const> values) {
    return std::accumulate(values.begin(), values.end(), 0.0) / static_cast<double>(values.size());
}

}  // namespace

double Figures::contribution_error(Contribution kind, std::span<std::uint32_t const> members,
                                   double share) const {
    auto const& [sources, of, of_all] = kind == Contribution::var ? var_spread : es_spread;
    double squares = 0.0;
    for (std::size_t source = 0; source < sources; ++source) {
        double sum = -share * of_all[source];
        for (auto const i : members) sum += of[i * sources + source];
        squares += sum * sum;
    }
    return std::sqrt(squares);
}

// What the last book left.
struct Engine::State {
    unsigned threads = 0;
    std::optional<Plan> plan;
    std::vector<std::shared_ptr<Name const>> names;
    std::shared_ptr<Settings const> settings;
    std::shared_ptr<Cells const> cells;
    std::vector<Stake> stakes;  // by name
    std::optional<Transform> transform;
    std::size_t updates = 0;  // since the transform was built

    bool update(std::span<std::shared_ptr<Name const> const> book,
                std::shared_ptr<Settings const> const& model);
    void rebuild();
    [[nodiscard]] std::string misfit() const;
    void fill_at_base(Figures& figures, double base) const;
    void fill(Figures& figures, double base, Transform::Atoms const& atoms, Fitness& fitness);
};

Engine::Engine(unsigned threads, std::optional<Plan> plan) : state_{std::make_unique<State>()} {
    state_->threads = threads;
    state_->plan = std::move(plan);
}
Engine::~Engine() = default;
Engine::Engine(Engine&&) noexcept = default;
Engine& Engine::operator=(Engine&&) noexcept = default;

Figures Engine::assess(std::span<std::shared_ptr<Name const> const> names,
                       std::shared_ptr<Settings const> const& settings) {
    State& state = *state_;
    auto& [threads, plan, book, model, cells, stakes, transform, updates] = state;
    bool const updated = state.update(names, settings);

    Figures figures;
    figures.names.resize(names.size());
    each_of(names.size(), threads, [&](std::size_t i) {
        figures.names[i] = closed_form(*names[i], *settings, cells->migration());
    });
    auto& totals = figures.totals;
    double base = 0.0;
    for (std::size_t i = 0; i < names.size(); ++i) {
        bool const lost = names[i]->grade == settings->grades.in_default();
        (lost ? totals.defaulted_loss : totals.expected_loss) += figures.names[i].expected_loss;
        base += stakes[i].base;
    }
    if (std::ranges::none_of(stakes, &Stake::takes_part)) {
        totals.loss_quantile = totals.expected_shortfall = base;
        for (std::size_t i = 0; i < names.size(); ++i)
            figures.names[i].es_contribution = stakes[i].base;
        return figures;
    }

    // A plan found just now is refined until it strains little, or would cost too much; one that
    // was given serves until it strains twice as much as when it was found.
    std::string reason = plan ? state.misfit() : std::string{};
    if (!reason.empty()) plan.reset();
    bool fresh = !plan;
    for (;;) {
        if (!plan) {
            plan = find_plan(*cells, stakes, settings->simulation.seed, threads);
            if (auto const exact = on_lattice(*plan, *settings, stakes)) plan = exact;
        }
        if (!updated || fresh) state.rebuild();
        figures.curve = transform->curve(base);
        auto const atoms = transform->atoms(figures.curve.quantile(settings->confidence) - base);
        if (atoms.none >= settings->confidence) {
            state.fill_at_base(figures, base);
            break;
        }
        auto fitness = fitness_of(figures.curve, *settings, totals.expected_loss);
        std::size_t const large = transform->large();
        if (fresh && strain(fitness) > fresh_strain_max) {
            if (auto better = refined(*plan, fitness, large)) {
                plan = std::move(better);
                continue;
            }
        }
        state.fill(figures, base, atoms, fitness);
        if (!fresh) {
            reason = unfit(fitness, *plan, std::max(1.0, 2.0 * plan->strain));
            if (reason.empty()) break;
            fresh = true;
            plan.reset();
            continue;
        }
        if (strain(fitness) > fresh_strain_max) {
            if (auto better = refined(*plan, fitness, large)) {
                plan = std::move(better);
                continue;
            }
        }
        plan->effective_share = fitness.effective_share;
        plan->strain = strain(fitness);
        break;
    }
    figures.plan = *plan;
    figures.plan_replaced = std::move(reason);
    return figures;
}

// Brings the state to a book. True where the transform was brought there too, by what differs.
bool Engine::State::update(std::span<std::shared_ptr<Name const> const> book,
                           std::shared_ptr<Settings const> const& model) {
    std::vector<Stake> next(book.size());
    if (transform && settings == model && updates < updates_max) {
        // Both are in the order of counterparty_id.
        std::vector<std::pair<Stake, Stake>> changed;
        bool known = true;
        std::size_t old = 0;
        for (std::size_t i = 0; i < book.size() && known && changed.size() <= changed_max; ++i) {
            while (old < names.size() && names[old]->counterparty_id < book[i]->counterparty_id)
                changed.emplace_back(stakes[old++], Stake{});
            bool const was_there =
                old < names.size() && names[old]->counterparty_id == book[i]->counterparty_id;
            if (was_there && names[old] == book[i]) {
                next[i] = stakes[old++];
                continue;
            }
            auto const stake = cells->stake(*book[i]);
            known = stake.has_value() && cells->has_kind(*stake);
            if (!known) break;
            next[i] = *stake;
            Stake const before = was_there ? stakes[old++] : Stake{};
            if (before != *stake) changed.emplace_back(before, *stake);
        }
        for (; old < names.size(); ++old) changed.emplace_back(stakes[old], Stake{});
        if (known && changed.size() <= changed_max) {
            names.assign(book.begin(), book.end());
            stakes = std::move(next);
            updates += changed.size();
            if (changed.empty() || transform->replace(changed)) return true;
            transform.reset();
            return false;
        }
    }
    names.assign(book.begin(), book.end());
    settings = model;
    cells = std::make_shared<Cells const>(book, *model);
    stakes = std::move(next);
    each_of(book.size(), threads, [&](std::size_t i) { stakes[i] = *cells->stake(*book[i]); });
    transform.reset();
    return false;
}

void Engine::State::rebuild() {
    transform.emplace(cells, *plan, threads);
    transform->build(stakes);
    updates = 0;
}

// Why the plan it was given cannot be used for this book at all.
std::string Engine::State::misfit() const {
    if (!is_usable(*plan, *cells)) return "it is of another model, or none";
    if (plan->inversion == Inversion::lattice && !is_on_lattice(*plan, stakes))
        return "losses are not multiples of its unit";
    return {};
}

// Where more than the confidence is on no loss at all, the quantile is that of everybody staying,
// and whoever loses loses beyond it.
void Engine::State::fill_at_base(Figures& figures, double base) const {
    auto& totals = figures.totals;
    double const beyond = 1.0 - settings->confidence;
    totals.loss_quantile = base;
    totals.credit_var = base - totals.expected_loss;
    totals.expected_shortfall = base + (totals.expected_loss - base) / beyond;
    for (std::size_t i = 0; i < figures.names.size(); ++i) {
        if (!stakes[i].takes_part) continue;
        auto& own = figures.names[i];
        own.var_contribution = stakes[i].base - own.expected_loss;
        own.es_contribution = stakes[i].base + (own.expected_loss - stakes[i].base) / beyond;
    }
}

// What the transform says of the totals and of each name's contributions.
void Engine::State::fill(Figures& figures, double base, Transform::Atoms const& atoms,
                         Fitness& fitness) {
    auto& totals = figures.totals;
    double const confidence = settings->confidence;
    double const beyond = 1.0 - confidence;
    LossCurve const& curve = figures.curve;

    double const q = curve.quantile(confidence);
    double const tail = curve.tail(q);
    totals.loss_quantile = q;
    totals.credit_var = q - totals.expected_loss;
    totals.expected_shortfall = q + curve.excess(q) / beyond;

    // Functionals of the loss at the quantile: the tail above it and the mass at it.
    Contour const& contour = curve.contour();
    double const x = q - base;
    Transform::Target const above{contour.tail(x), contour.tail_image()};
    Transform::Target const at{contour.density(x), 0.0};
    auto const density_by_part = curve.functional(at.weights);
    auto const tail_by_part = curve.tails(q);
    double const density = mean_of(density_by_part);
    // Names alone in default are atoms of the loss, between which a quantile cannot lie.
    double const scale = scale_of(totals.expected_shortfall, totals.expected_loss);
    double const jump = plan->unit > 0.0 ? 0.0 : 0.5 * atoms.one / density;
    // For large names, the window's effect; and where the loss is not smooth beside it, so that
    // atoms near the quantile are in the tail in part, what it would be with them out or in.
    bool const smooth = std::max(fitness.smoothing, jump / scale) <= 0.5 * smoothing_max;
    double const width = smooth ? 0.0 : atom_widths * plan->width;
    std::array const beside{Transform::Target{contour.tail(x, wider_window), contour.tail_image()},
                            Transform::Target{contour.tail(x - width), contour.tail_image()},
                            Transform::Target{contour.tail(x + width), contour.tail_image()}};
    double const window_effect = plan->width > 0.0 ? curve.window_effect(q) : 0.0;
    double const tail_before = curve.tail(q - width);
    double const tail_after = curve.tail(q + width);
    transform->differentiate({above, at}, beside);

    std::size_t const parts = transform->parts();
    bool const sampled = curve.is_sampled();
    std::size_t const sources = (sampled ? parts : 0) + 1;
    figures.var_spread = {sources, std::vector<float>(names.size() * sources),
                          std::vector<double>(sources)};
    figures.es_spread = figures.var_spread;
    auto const p = static_cast<double>(parts);
    double const share = 1.0 / std::sqrt(p * (p - 1.0));

    // What cumulants leave out of the tail: kappa_4 / 24 times its fourth derivative, which is not
    // trusted to be small beside an exponential's.
    double const rate = density / beyond;
    auto fourth_weights = above.weights;
    for (std::size_t k = 0; k < fourth_weights.size(); ++k)
        fourth_weights[k] *= std::pow(contour.nodes()[k], 4);
    double const fourth_derivative = std::max(std::abs(mean_of(curve.functional(fourth_weights))),
                                              fourth_part_min * beyond * std::pow(rate, 4));
    std::vector<double> fourth(names.size());

    each_of(names.size(), threads, [&](std::size_t i) {
        std::array<double, Transform::targets * parts_max> room;
        std::span<double> const values{room.data(), Transform::targets * parts};
        transform->by_name(stakes[i], values);
        std::span<double const> const tails = values.first(parts);
        std::span<double const> const densities = values.last(parts);
        double const at_quantile = mean_of(densities) / density;
        double const beyond_quantile = mean_of(tails);
        auto& own = figures.names[i];
        own.var_contribution = at_quantile;
        own.es_contribution = (beyond_quantile + at_quantile * (beyond - tail)) / beyond;
        float* const var_sources = &figures.var_spread.of[i * sources];
        float* const es_sources = &figures.es_spread.of[i * sources];
        if (sampled) {
            double var_mean = 0.0;
            double es_mean = 0.0;
            for (std::size_t r = 0; r < parts; ++r) {
                // Where the quantile moves, a part of it moves in proportion.
                double const moved = (tail_by_part[r] - beyond) * at_quantile / x;
                double const var =
                    (densities[r] - at_quantile * density_by_part[r] + moved) / density;
                double const es = (tails[r] - at_quantile * tail_by_part[r]) / beyond;
                var_sources[r] = static_cast<float>(share * var);
                es_sources[r] = static_cast<float>(share * es);
                var_mean += share * var / p;
                es_mean += share * es / p;
            }
            for (std::size_t r = 0; r < parts; ++r) {
                var_sources[r] -= static_cast<float>(var_mean);
                es_sources[r] -= static_cast<float>(es_mean);
            }
        }
        if (transform->is_large(stakes[i])) {
            auto const aside = transform->beside_of(stakes[i]);
            double const window = (aside[0] - beyond_quantile) / beyond * window_effect;
            double const before = (aside[1] + at_quantile * (beyond - tail_before)) / beyond;
            double const after = (aside[2] + at_quantile * (beyond - tail_after)) / beyond;
            double const moved = std::max(std::abs(before - own.es_contribution),
                                          std::abs(after - own.es_contribution));
            es_sources[sources - 1] = static_cast<float>(
                std::copysign(std::hypot(window, width > 0.0 ? moved : 0.0), window));
        } else if (stakes[i].takes_part)
            fourth[i] = fourth_cumulant(std::abs(own.es_contribution), stakes[i].largest);
    });

    // Each takes its part of what the sums are off by.
    auto const settle = [&](double NameFigures::*contribution, double sum) {
        double total = 0.0;
        double size = 0.0;
        for (auto const& name : figures.names) {
            total += name.*contribution;
            size += std::abs(name.*contribution);
        }
        for (auto& name : figures.names)
            if (size > 0.0)
                name.*contribution += (sum - total) * std::abs(name.*contribution) / size;
        return sum != 0.0 ? (sum - total) / sum : 0.0;
    };
    figures.var_residual = settle(&NameFigures::var_contribution, x);
    figures.es_residual = settle(&NameFigures::es_contribution, totals.expected_shortfall - base);

    double const cumulant = std::accumulate(fourth.begin(), fourth.end(), 0.0);
    fitness.fourth = std::abs(cumulant) * fourth_derivative / 24.0 / density / scale;
    fitness.effective_share = transform->effective_share();

    double const left_out = fitness.fourth * scale;
    totals.loss_quantile_error = std::hypot(curve.quantile_error(confidence), left_out, jump);
    totals.credit_var_error = totals.loss_quantile_error;
    totals.expected_shortfall_error = std::hypot(curve.shortfall_error(confidence), left_out);

    // The last source of error is the method's own: the window, what cumulants leave out, and the
    // part of what the sums missed. Only the window's effect on large names is known by name.
    double const es_window =
        (curve.excess(q, wider_window) - curve.excess(q)) / beyond * window_effect;
    double const es_move = std::max(std::abs(totals.expected_shortfall - base), 1e-300);
    double const var_move = std::max(std::abs(x), 1e-300);
    double const es_common = std::hypot(left_out / es_move, figures.es_residual);
    double const es_method = std::hypot(es_common, es_window / es_move);
    double const var_method =
        std::hypot(left_out / var_move, fitness.smoothing * scale / var_move, figures.var_residual);
    for (std::size_t i = 0; i < names.size(); ++i) {
        auto& own = figures.names[i];
        float* const var_sources = &figures.var_spread.of[i * sources];
        float* const es_sources = &figures.es_spread.of[i * sources];
        var_sources[sources - 1] = static_cast<float>(var_method * own.var_contribution);
        float& es_own = es_sources[sources - 1];
        es_own = static_cast<float>(
            transform->is_large(stakes[i])
                ? std::copysign(std::hypot(es_own, es_common * own.es_contribution), es_own)
                : es_method * own.es_contribution);
        double var_squares = 0.0;
        double es_squares = 0.0;
        for (std::size_t r = 0; r < sources; ++r) {
            figures.var_spread.of_all[r] += var_sources[r];
            figures.es_spread.of_all[r] += es_sources[r];
            var_squares += double{var_sources[r]} * var_sources[r];
            es_squares += double{es_sources[r]} * es_sources[r];
        }
        own.var_contribution_error = std::sqrt(var_squares);
        own.es_contribution_error = std::sqrt(es_squares);
        own.es_contribution += stakes[i].base;
        if (names[i]->grade != settings->grades.in_default())
            own.var_contribution += stakes[i].base - own.expected_loss;
    }
}

Figures assess(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
               unsigned threads) {
    // The settings outlive the engine.
    std::shared_ptr<Settings const> const borrowed{std::shared_ptr<void>{}, &settings};
    return Engine{threads}.assess(names, borrowed);
}

}  // namespace model
