#include "alerts/life.hpp"

#include <fmt/format.h>

#include <algorithm>
#include <map>
#include <numbers>

namespace alerts {
namespace {

using model::Held;

// Row 5's step: a tenth of the breach level, or of what was observed where the level is 0.
constexpr double worse_by = 0.10;

// One subject of one limit, as the turn sees it.
struct Situation {
    Alert alert;
    Usage const* usage = nullptr;  // null: nothing measured
    Usage const* before = nullptr;
    Waiver const* waiver = nullptr;  // the one ruling now
    Limit const* limit = nullptr;    // null: no longer in force
    bool limits_changed = false;
    Held held = Held::no;
    model::Time at{};
};

bool over_any(Usage const& usage) {
    return (usage.breach_level && usage.over(*usage.breach_level)) ||
           (usage.warning_level && usage.over(*usage.warning_level));
}

bool clear_of(Usage const& usage, std::optional<double> warning, std::optional<double> breach) {
    return breach && usage.clear(*breach) && (!warning || usage.clear(*warning));
}

bool clear_of_all(Usage const& usage) {
    return clear_of(usage, usage.warning_level, usage.breach_level);
}

// Whether the subject would not be clear had limits.yaml not moved its levels up.
bool only_level_raised(Situation const& now) {
    return now.limits_changed && now.before != nullptr && now.before->breach_level &&
           !clear_of(*now.usage, now.before->warning_level, now.before->breach_level);
}

// Beyond what the figures' own uncertainty, here and at the acknowledgement, can explain.
bool is_worse(Alert const& alert, Usage const& usage) {
    if (!usage.breach_level) return false;
    if (alert.severity == Severity::warning && usage.over(*usage.breach_level)) return true;
    double const then = alert.acknowledged_observed.value_or(alert.observed);
    double const step = worse_by * (*usage.breach_level > 0.0 ? *usage.breach_level : then);
    double const noise = 3.0 * std::numbers::sqrt2 * usage.observed_error;
    return usage.observed - then >= step + noise && usage.observed > then;
}

bool sees(Sight sight, Situation const& now) {
    auto const* const usage = now.usage;
    bool const over = usage != nullptr && over_any(*usage);
    bool const within_waiver =
        now.waiver != nullptr && usage != nullptr && !usage->over(now.waiver->level);
    bool const clear = usage != nullptr && clear_of_all(*usage);
    switch (sight) {
        case Sight::over:
            return over && !within_waiver;
        case Sight::over_but_covered:
            return over && within_waiver;
        case Sight::taken_up:
        case Sight::taken_back:
            return false;  // a person's, made in the database
        case Sight::due:
            return now.alert.due_at && *now.alert.due_at <= now.at;
        case Sight::worse:
            return usage != nullptr && is_worse(now.alert, *usage);
        case Sight::over_breach:
            return now.alert.severity == Severity::warning && usage != nullptr &&
                   usage->breach_level && usage->over(*usage->breach_level);
        case Sight::clear_of_breach:
            return now.alert.severity == Severity::breach && usage != nullptr &&
                   usage->breach_level && usage->clear(*usage->breach_level) && !clear;
        case Sight::covered:
            return within_waiver && !clear;
        case Sight::over_waiver:
            return now.waiver != nullptr && usage != nullptr && !within_waiver;
        case Sight::waiver_ended:
            return now.waiver == nullptr && over;
        case Sight::clear:
            return clear && !only_level_raised(now);
        case Sight::level_raised:
            return clear && only_level_raised(now);
        case Sight::limit_removed:
            return now.limit == nullptr;
        case Sight::out_of_scope:
            return now.limit != nullptr && usage == nullptr && now.held == Held::no;
    }
    return false;
}

Severity severity_after(Event event, Severity before, Usage const* usage) {
    bool const breach =
        usage != nullptr && usage->breach_level && usage->over(*usage->breach_level);
    switch (event) {
        case Event::opened:
        case Event::waiver_ended:
            return breach ? Severity::breach : Severity::warning;
        case Event::worse:
            return breach ? Severity::breach : before;
        case Event::raised:
        case Event::waiver_exceeded:
            return Severity::breach;
        case Event::eased:
            return Severity::warning;
        default:
            return before;
    }
}

// The alert with the turn's figures, its state and severity as they were.
void show(Alert& alert, Usage const& usage) {
    alert.measure = usage.measure;
    alert.observed = usage.observed;
    alert.level = usage.level(alert.severity).value_or(alert.level);
    alert.worst_observed = std::max(alert.worst_observed, usage.observed);
}

// An easing keeps an acknowledgement; every other row says where it leads.
State target(Transition const& row, State from) {
    return row.event == Event::eased ? from : row.to;
}

Transition const* next(Situation const& now) {
    // Ends first, so that nothing is re-opened on the turn that ends it.
    static constexpr std::array order{14, 13, 12, 10, 11, 9, 5, 4, 7, 8, 2, 1};
    for (int const number : order)
        for (auto const& row : transitions)
            if (row.row == number && (row.from & any_of(now.alert.state)) != 0U &&
                !(row.barred_by_held && now.held != Held::no) && sees(row.on, now))
                return &row;
    return nullptr;
}

Outcome settle(Situation now) {
    Outcome outcome;
    if (now.usage != nullptr) show(now.alert, *now.usage);
    now.alert.held = now.held;
    while (auto const* const row = next(now)) {
        auto& alert = now.alert;
        State const from = alert.state;
        if (from == State::none && now.usage != nullptr)
            alert.severity = severity_after(Event::opened, alert.severity, now.usage);
        alert.severity = severity_after(row->event, alert.severity, now.usage);
        alert.state = target(*row, from);
        if (alert.state != State::acknowledged) alert.due_at.reset();
        if (alert.state == State::withdrawn) alert.end_reason = row->reason;
        if (now.usage != nullptr) show(alert, *now.usage);
        if (from != State::none) ++alert.row_version;
        outcome.moves.push_back(
            {row, from, alert.state, alert.severity, alert.observed, alert.level});
        if ((live & any_of(alert.state)) == 0U) break;
    }
    outcome.alert = std::move(now.alert);
    return outcome;
}

}  // namespace

std::vector<Outcome> advance(Scene const& scene) {
    std::map<SubjectKey, Waiver const*> waivers;
    for (auto const& waiver : scene.waivers)
        if (waiver.valid_from <= scene.as_of.day && scene.as_of.day <= waiver.valid_until)
            waivers[waiver.key] = &waiver;
    auto const situation = [&](Alert alert, Usage const* usage) {
        auto const waiver = waivers.find(alert.key);
        Situation now{.alert = std::move(alert),
                      .usage = usage,
                      .before = nullptr,
                      .waiver = waiver == waivers.end() ? nullptr : waiver->second,
                      .limit = nullptr,
                      .limits_changed = scene.limits_changed,
                      .held = Held::no,
                      .at = scene.as_of.at};
        if (scene.checks_before != nullptr) now.before = scene.checks_before->find(now.alert.key);
        now.held = usage != nullptr ? usage->held : scene.checks.held(now.alert.key);
        auto const limit =
            std::ranges::find(scene.limits, now.alert.key.limit_id, &Limit::limit_id);
        if (limit != scene.limits.end()) {
            now.limit = &*limit;
            now.alert.owner = limit->owner;
        }
        return now;
    };

    std::vector<Outcome> outcomes;
    std::map<SubjectKey, Alert const*> alerts;
    for (auto const& alert : scene.alerts) {
        alerts[alert.key] = &alert;
        auto outcome = settle(situation(alert, scene.checks.find(alert.key)));
        if (!outcome.moves.empty() || !(outcome.alert == alert))
            outcomes.push_back(std::move(outcome));
    }
    for (auto const& usage : scene.checks.usages) {
        if (!over_any(usage) || alerts.contains(usage.key)) continue;
        Alert fresh;
        fresh.key = usage.key;
        fresh.worst_observed = usage.observed;
        outcomes.push_back(settle(situation(std::move(fresh), &usage)));
    }
    return outcomes;
}

std::string life_table() {
    std::string text;
    for (auto const& row : transitions) {
        std::string from;
        for (auto const& [state, spelling] : state_words)
            if ((row.from & any_of(state)) != 0U)
                from += fmt::format("{}{}", from.empty() ? "" : " ", spelling);
        text += fmt::format("{:>2} | {} | {} | {}{} | {}\n", row.row, from,
                            word(event_words, row.event),
                            row.event == Event::eased ? "as it was" : word(state_words, row.to),
                            row.barred_by_held ? " unless held" : "", row.reason);
    }
    return text;
}

}  // namespace alerts
