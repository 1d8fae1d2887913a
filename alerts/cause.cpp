#include "alerts/cause.hpp"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <cmath>

namespace alerts {
namespace {

using model::Name;
using NamePtr = std::shared_ptr<Name const>;

// The parts whose step has its own state of the names; capital and limit only move the level.
constexpr std::array steps{Part::exchange_rate, Part::collateral, Part::exposure, Part::rating,
                           Part::model,         Part::capital,    Part::limit,    Part::portfolio};

using Subjects = std::span<std::pair<SubjectKey, Severity> const>;

Limit const* find_limit(Limits const& limits, std::string_view limit_id) {
    auto const limit = std::ranges::find(limits, limit_id, &Limit::limit_id);
    return limit != limits.end() ? &*limit : nullptr;
}

// One counterparty on both sides of the turn.
struct BothSides {
    NamePtr before;
    NamePtr after;
    model::NameFigures const* figures_before = nullptr;
    model::NameFigures const* figures_after = nullptr;
};

// Whether what one of the subjects is held against depends on every name.
bool needs_everybody(Stage const& before, Stage const& after, Subjects subjects) {
    return std::ranges::any_of(subjects, [&](auto const& subject) {
        return std::ranges::any_of(
            std::array{&before.limits, &after.limits}, [&](Limits const* limits) {
                auto const* const limit = find_limit(*limits, subject.first.limit_id);
                return limit != nullptr && is_held_against_portfolio(*limit);
            });
    });
}

// The names that can have moved the subjects, by counterparty_id: those that are not the same any
// more, and with them the others of the subjects' sets, or everybody.
std::vector<BothSides> both_sides(Stage const& before, Stage const& after, View const& view,
                                  Subjects subjects, bool everybody) {
    auto const& old_names = before.book.names();
    auto const& new_names = after.book.names();
    std::vector<bool> asked(new_names.size(), everybody);
    for (auto const& [key, severity] : subjects)
        for (auto const i : view.members(key.kind, key.subject)) asked[i] = true;
    std::vector<BothSides> all;
    each_pair(old_names, new_names, [&](auto o, auto n) {
        if (o && n && old_names[*o] == new_names[*n] && !asked[*n]) return;
        all.push_back({o ? old_names[*o] : nullptr, n ? new_names[*n] : nullptr,
                       o ? &before.figures[*o] : nullptr, n ? &after.figures[*n] : nullptr});
    });
    return all;
}

// The rates of one day as if they had ruled on another.
model::Shared rates_moved(Stage const& before, Stage const& after) {
    model::Shared shared = before.book.shared();
    for (auto const& [currency, rows] : after.book.shared().rates)
        if (auto const rate = model::rate_in_force(after.book.shared(), *before.book.settings(),
                                                   currency, after.book.as_of().day))
            shared.rates[currency] = {{before.book.as_of().day, rate->base_per_unit}};
    return shared;
}

model::ExposureRow const* find_exposure(model::Inputs const* inputs, std::string const& id) {
    if (inputs == nullptr) return nullptr;
    auto const found =
        std::ranges::lower_bound(inputs->exposures, id, {}, &model::ExposureRow::exposure_id);
    return found != inputs->exposures.end() && found->exposure_id == id ? &*found : nullptr;
}

model::Inputs with_collateral_of(model::Inputs inputs, model::Inputs const* other) {
    for (auto& row : inputs.exposures)
        if (auto const* const now = find_exposure(other, row.exposure_id))
            row.collateral = now->collateral;
    return inputs;
}

// The facts that sort a name into sets, other than its grade.
void keep_facts_of(Name const& before, Name& name) {
    name.segment = before.segment;
    name.sector = before.sector;
    name.country = before.country;
    name.groups = before.groups;
    name.asset_correlation = before.asset_correlation;
    name.known = before.known;
}

// The path from one stage to the other.
class Walk {
public:
    Walk(Stage const& before, View const& view_before, Stage const& after, View const& view_after,
         Subjects subjects)
        : before_{before},
          after_{after},
          view_before_{view_before},
          everybody_{needs_everybody(before, after, subjects)},
          pairs_{both_sides(before, after, view_after, subjects, everybody_)},
          rates_{rates_moved(before, after)},
          migration_before_{*before.book.settings()},
          migration_after_{*after.book.settings()},
          same_model_{before.book.settings() == after.book.settings()} {}

    // Where the subjects stand after a step.
    [[nodiscard]] std::vector<Position> positions(Part step, Subjects subjects,
                                                  std::span<Position const> last) const {
        if (step == Part::portfolio) return {last.begin(), last.end()};
        std::vector<NamePtr> names;
        std::vector<model::NameFigures> figures;
        for (auto const& pair : pairs_) {
            auto name = name_after(step, pair);
            if (!name) continue;
            figures.push_back(figures_after(step, pair, *name));
            names.push_back(std::move(name));
        }
        bool const model_moved = step >= Part::model;
        bool const capital_moved = step >= Part::capital;
        Stage const& shared_of = capital_moved ? after_ : before_;
        View const view{names,
                        {},
                        figures,
                        nullptr,
                        shared_of.book.shared(),
                        *(model_moved ? after_ : before_).book.settings(),
                        shared_of.book.as_of().day,
                        everybody_ ? &view_before_ : nullptr};
        auto const& limits = step >= Part::limit ? after_.limits : before_.limits;
        std::vector<Position> positions;
        for (std::size_t i = 0; i < subjects.size(); ++i)
            positions.push_back(
                position(view, limits, subjects[i].first, subjects[i].second, last[i]));
        return positions;
    }

    // The view before anything moved, and the one with the firm's own acts taken out.
    [[nodiscard]] std::vector<Position> positions_before(Subjects subjects,
                                                         std::span<Position const> last) const {
        std::vector<Position> positions;
        for (std::size_t i = 0; i < subjects.size(); ++i)
            positions.push_back(position(view_before_, before_.limits, subjects[i].first,
                                         subjects[i].second, last[i]));
        return positions;
    }

    // Whether each subject would be inside its level with the firm's own acts taken out.
    [[nodiscard]] std::vector<bool> inside_without_own_acts(Subjects subjects) const;

private:
    // A subject that is not there holds nothing against the level it meets later.
    static Position position(View const& view, Limits const& limits, SubjectKey const& key,
                             Severity severity, Position const& last) {
        auto const* const limit = find_limit(limits, key.limit_id);
        if (limit == nullptr) return {0.0, std::nullopt};
        auto const usage = view.usage(*limit, key.kind, key.subject);
        if (!usage) return {0.0, last.level};
        return {usage->observed, usage->level(severity)};
    }

    [[nodiscard]] NamePtr name_after(Part step, BothSides const& pair) const {
        if (pair.before == pair.after && same_model_) return pair.before;
        auto const* const inputs_before =
            pair.before ? before_.book.inputs(pair.before->counterparty_id) : nullptr;
        auto const& id = (pair.before ? pair.before : pair.after)->counterparty_id;
        auto const* const inputs_after = after_.book.inputs(id);
        auto const& settings = *before_.book.settings();
        if (step < Part::exposure) {
            if (!pair.before) return nullptr;
            auto inputs = step == Part::collateral
                              ? with_collateral_of(*inputs_before, inputs_after)
                              : *inputs_before;
            return std::make_shared<Name const>(
                model::derive(inputs, rates_, settings, before_.book.as_of()));
        }
        if (step >= Part::model) {
            if (!pair.before) return pair.after;
            Name name = pair.after ? *pair.after : gone(*pair.before);
            keep_facts_of(*pair.before, name);
            return std::make_shared<Name const>(std::move(name));
        }
        Name name = pair.after ? model::derive(*inputs_after, after_.book.shared(), settings,
                                               after_.book.as_of())
                               : gone(*pair.before);
        if (pair.before) {
            keep_facts_of(*pair.before, name);
            if (step == Part::exposure) name.grade = pair.before->grade;
        }
        return std::make_shared<Name const>(std::move(name));
    }

    static Name gone(Name name) {
        name.exposure_at_default = name.commitment = {};
        name.loss_at_default = 0.0;
        name.facilities.clear();
        return name;
    }

    [[nodiscard]] model::NameFigures figures_after(Part step, BothSides const& pair,
                                                   Name const& name) const {
        if (pair.before == pair.after && same_model_) return *pair.figures_before;
        auto figures = step >= Part::model
                           ? model::closed_form(name, *after_.book.settings(), migration_after_)
                           : model::closed_form(name, *before_.book.settings(), migration_before_);
        bool const own_move = !pair.before || pair.before->loss_at_default <= 0.0 ||
                              (step >= Part::rating && name.grade != pair.before->grade) ||
                              (step >= Part::model && !same_model_);
        if (own_move) {
            if (pair.figures_after != nullptr) {
                figures.var_contribution = pair.figures_after->var_contribution;
                figures.es_contribution = pair.figures_after->es_contribution;
            }
        } else {
            double const scale = name.loss_at_default / pair.before->loss_at_default;
            figures.var_contribution = pair.figures_before->var_contribution * scale;
            figures.es_contribution = pair.figures_before->es_contribution * scale;
        }
        return figures;
    }

    Stage before_;
    Stage after_;
    View const& view_before_;
    bool everybody_;
    std::vector<BothSides> pairs_;
    model::Shared rates_;
    model::Migration migration_before_;
    model::Migration migration_after_;
    bool same_model_;
};

// The rows after the turn without what the firm itself chose to do in it.
model::Inputs without_own_acts(model::Inputs const* before, model::Inputs after) {
    std::erase_if(after.exposures, [&](model::ExposureRow& row) {
        auto const* const old = find_exposure(before, row.exposure_id);
        if (old == nullptr) return true;
        double const committed = old->committed ? std::max(0.0, old->undrawn) : 0.0;
        double const granted = old->drawn + std::max(0.0, old->undrawn);
        row.drawn = std::min(row.drawn, std::max(old->drawn, old->drawn + committed));
        row.undrawn = std::min(row.undrawn, std::max(0.0, granted - row.drawn));
        row.collateral = std::max(row.collateral, old->collateral);
        return false;
    });
    return after;
}

std::vector<bool> Walk::inside_without_own_acts(Subjects subjects) const {
    std::vector<NamePtr> names;
    std::vector<model::NameFigures> figures;
    auto const& settings = *after_.book.settings();
    for (auto const& pair : pairs_) {
        if (!pair.after) continue;
        if (pair.before == pair.after) {
            names.push_back(pair.after);
            figures.push_back(*pair.figures_after);
            continue;
        }
        auto const& id = pair.after->counterparty_id;
        auto name =
            model::derive(without_own_acts(before_.book.inputs(id), *after_.book.inputs(id)),
                          after_.book.shared(), settings, after_.book.as_of());
        auto own = model::closed_form(name, settings, migration_after_);
        double const loss = pair.after->loss_at_default;
        double const scale = loss > 0.0 ? name.loss_at_default / loss : 0.0;
        own.var_contribution = pair.figures_after->var_contribution * scale;
        own.es_contribution = pair.figures_after->es_contribution * scale;
        figures.push_back(own);
        names.push_back(std::make_shared<Name const>(std::move(name)));
    }
    View const view{
        names, {}, figures, nullptr, after_.book.shared(), settings, after_.book.as_of().day};
    std::vector<bool> inside;
    for (auto const& [key, severity] : subjects) {
        auto const* const limit = find_limit(after_.limits, key.limit_id);
        auto const usage =
            limit == nullptr ? std::nullopt : view.usage(*limit, key.kind, key.subject);
        auto const level = usage ? usage->level(severity) : std::nullopt;
        inside.push_back(!level || usage->observed <= *level);
    }
    return inside;
}

}  // namespace

View view_of(Stage const& stage, model::Figures const* errors, View const* before) {
    return {stage.book.names(),  stage.book.unknown(),   stage.figures,          errors,
            stage.book.shared(), *stage.book.settings(), stage.book.as_of().day, before};
}

std::optional<Part> Cause::largest() const {
    double const direction = after.excess() - before.excess() < 0.0 ? -1.0 : 1.0;
    auto const largest = std::ranges::max_element(
        parts, {}, [&](auto const& part) { return direction * part.second; });
    return largest == parts.end() ? std::nullopt : std::optional{largest->first};
}

std::vector<Explanation> explain(Stage before, Stage after, Subjects subjects) {
    if (subjects.empty()) return {};
    std::optional<View> made_before;
    std::optional<View> made_after;
    auto const& view_before =
        before.view != nullptr ? *before.view : made_before.emplace(view_of(before));
    auto const& view = after.view != nullptr ? *after.view : made_after.emplace(view_of(after));
    std::vector<Position> last;
    for (auto const& [key, severity] : subjects) {
        auto const* const limit = find_limit(after.limits, key.limit_id);
        auto const usage =
            limit == nullptr ? std::nullopt : view.usage(*limit, key.kind, key.subject);
        last.push_back(usage ? Position{usage->observed, usage->level(severity)} : Position{});
    }

    Walk const walk{before, view_before, after, view, subjects};
    auto here = walk.positions_before(subjects, last);
    std::vector<Explanation> explanations(subjects.size());
    for (std::size_t i = 0; i < subjects.size(); ++i) {
        explanations[i].cause.before = here[i];
        explanations[i].cause.after = last[i];
    }
    for (auto const part : steps) {
        auto next = walk.positions(part, subjects, last);
        for (std::size_t i = 0; i < subjects.size(); ++i)
            if (double const moved = next[i].excess() - here[i].excess(); moved != 0.0)
                explanations[i].cause.parts.emplace_back(part, moved);
        here = std::move(next);
    }
    auto const inside = walk.inside_without_own_acts(subjects);
    for (std::size_t i = 0; i < subjects.size(); ++i)
        explanations[i].nature = inside[i] ? Nature::active : Nature::passive;
    return explanations;
}

Explanation explain_at_start(Checks const* before, Usage const& after, Severity severity) {
    Explanation explanation;
    auto& cause = explanation.cause;
    cause.after = {after.observed, after.level(severity)};
    auto const* const usage = before != nullptr ? before->find(after.key) : nullptr;
    if (usage != nullptr) cause.before = {usage->observed, usage->level(severity)};
    cause.parts.emplace_back(Part::found_at_start, cause.after.excess() - cause.before.excess());
    return explanation;
}

std::string scaled(double value, int more) {
    double const size = std::abs(value);
    if (size >= 999.5e6) return fmt::format("{:.{}f} bn", value / 1e9, 2 + more);
    if (size >= 999.5e3) return fmt::format("{:.{}f} m", value / 1e6, 1 + more);
    if (size >= 999.5) return fmt::format("{:.{}f} k", value / 1e3, 1 + more);
    return fmt::format("{:.{}g}", value, 4 + more);
}

std::string readable(double value, Unit unit, std::string_view currency, int more) {
    if (unit == Unit::fraction) return fmt::format("{:.{}g}%", 100.0 * value, 3 + more);
    if (unit == Unit::index) return fmt::format("{:.{}f}", value, 4 + more);
    return fmt::format("{} {}", currency, scaled(value, more));
}

std::string sentence(Alert const& alert, std::string_view subject_name, Cause const& cause,
                     std::optional<Nature> nature, std::string_view currency) {
    auto const unit = unit_of(alert.measure);
    auto const spaced = [](std::string_view word) {
        std::string text{word};
        std::ranges::replace(text, '_', ' ');
        return text;
    };
    std::string who = alert.key.kind == SubjectKind::portfolio
                          ? "the portfolio"
                          : fmt::format("{} {}", spaced(word(subject_kind_words, alert.key.kind)),
                                        alert.key.subject);
    if (!subject_name.empty()) who += fmt::format(" ({})", subject_name);
    std::string measure = spaced(word(measure_words, alert.measure));
    measure.front() = static_cast<char>(measure.front() - 'a' + 'A');
    bool const alike = alert.observed != alert.level && readable(alert.observed, unit, currency) ==
                                                            readable(alert.level, unit, currency);
    auto const amount = [&](double value) {
        return readable(value, unit, currency, alike ? 3 : 0);
    };

    std::string text = fmt::format("{} of {} is {}", measure, who, amount(alert.observed));
    auto const severity = word(severity_words, alert.severity);
    if (alert.state == State::cured) {
        text += fmt::format(", back inside the level {} of {}", amount(alert.level),
                            alert.key.limit_id);
    } else if (alert.state == State::withdrawn) {
        text += fmt::format("; the alert of {} is withdrawn: {}", alert.key.limit_id,
                            spaced(alert.end_reason));
    } else {
        text += fmt::format(", against the {} level {} of {}", severity, amount(alert.level),
                            alert.key.limit_id);
    }
    std::vector<std::pair<Part, double>> parts = cause.parts;
    std::ranges::sort(parts, std::ranges::greater{},
                      [](auto const& part) { return std::abs(part.second); });
    if (!parts.empty() && parts.front().first == Part::found_at_start) {
        text += "; found at the start";
    } else if (!parts.empty()) {
        text += "; since before:";
        for (std::size_t i = 0; i < std::min<std::size_t>(parts.size(), 3); ++i)
            text += fmt::format(
                "{} {} {}{}", i == 0 ? "" : ",", spaced(word(part_words, parts[i].first)),
                parts[i].second > 0.0 ? "+" : "−", amount(std::abs(parts[i].second)));
    }
    if (nature && (alert.state == State::open || alert.state == State::acknowledged))
        text += *nature == Nature::active ? "; by an act of our own (active)"
                                          : "; not by an act of our own (passive)";
    if (alert.held != model::Held::no)
        text += fmt::format("; held: {}", spaced(word(held_words, alert.held)));
    return text + ".";
}

}  // namespace alerts
