#pragma once

#include "alerts/check.hpp"

#include <array>
#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

// An alert's life: one table, written once, as data. Pure: time comes with the turn.

namespace alerts {

enum class State { none, open, acknowledged, waived, cured, withdrawn };
enum class Nature { active, passive };
enum class Event {
    opened,
    raised,
    eased,
    acknowledged,
    taken_back,
    due,
    worse,
    waived,
    waiver_exceeded,
    waiver_ended,
    cured,
    withdrawn
};

// What a turn sees of one subject; each is a question `sees` answers.
enum class Sight {
    over,
    over_but_covered,
    taken_up,
    due,
    worse,
    taken_back,
    over_breach,
    clear_of_breach,
    covered,
    over_waiver,
    waiver_ended,
    clear,
    level_raised,
    limit_removed,
    out_of_scope
};

inline constexpr std::pair<State, std::string_view> state_words[] = {
    {State::none, "none"},     {State::open, "open"},   {State::acknowledged, "acknowledged"},
    {State::waived, "waived"}, {State::cured, "cured"}, {State::withdrawn, "withdrawn"}};
inline constexpr std::pair<Nature, std::string_view> nature_words[] = {
    {Nature::active, "active"}, {Nature::passive, "passive"}};
inline constexpr std::pair<Event, std::string_view> event_words[] = {
    {Event::opened, "opened"},
    {Event::raised, "raised"},
    {Event::eased, "eased"},
    {Event::acknowledged, "acknowledged"},
    {Event::taken_back, "taken_back"},
    {Event::due, "due"},
    {Event::worse, "worse"},
    {Event::waived, "waived"},
    {Event::waiver_exceeded, "waiver_exceeded"},
    {Event::waiver_ended, "waiver_ended"},
    {Event::cured, "cured"},
    {Event::withdrawn, "withdrawn"}};

// A set of states, one bit each.
using States = unsigned;
constexpr States any_of(auto... states) {
    return ((1U << static_cast<unsigned>(states)) | ...);
}

struct Transition {
    int row;
    States from;
    Sight on;
    State to;
    Event event;
    bool barred_by_held;      // a subject that cannot be believed downward does not make this move
    std::string_view reason;  // the alert's, the log's and the desk's words for it
};

inline constexpr States never_or_ended = any_of(State::none, State::cured, State::withdrawn);
inline constexpr States live = any_of(State::open, State::acknowledged, State::waived);

// clang-format off
inline constexpr std::array transitions{
    Transition{ 1, never_or_ended,                           Sight::over,             State::open,         Event::opened,          false, "level exceeded"},
    Transition{ 2, never_or_ended,                           Sight::over_but_covered, State::waived,       Event::waived,          false, "level exceeded under a waiver"},
    Transition{ 3, any_of(State::open),                      Sight::taken_up,         State::acknowledged, Event::acknowledged,    false, "taken up by the desk"},
    Transition{ 4, any_of(State::acknowledged),              Sight::due,              State::open,         Event::due,             false, "acknowledged until now"},
    Transition{ 5, any_of(State::acknowledged),              Sight::worse,            State::open,         Event::worse,           false, "worse than when it was taken up"},
    Transition{ 6, any_of(State::acknowledged),              Sight::taken_back,       State::open,         Event::taken_back,      false, "acknowledgement taken back"},
    Transition{ 7, any_of(State::open),                      Sight::over_breach,      State::open,         Event::raised,          false, "the warning became a breach"},
    Transition{ 8, any_of(State::open, State::acknowledged), Sight::clear_of_breach,  State::open,         Event::eased,           true,  "back below the breach level's release"},
    Transition{ 9, any_of(State::open, State::acknowledged), Sight::covered,          State::waived,       Event::waived,          false, "a waiver covers it"},
    Transition{10, any_of(State::waived),                    Sight::over_waiver,      State::open,         Event::waiver_exceeded, false, "over the waiver's level"},
    Transition{11, any_of(State::waived),                    Sight::waiver_ended,     State::open,         Event::waiver_ended,    false, "the waiver ended, still over"},
    Transition{12, live,                                     Sight::clear,            State::cured,        Event::cured,           true,  "back below the release of every level"},
    Transition{13, live,                                     Sight::level_raised,     State::withdrawn,    Event::withdrawn,       true,  "level_raised"},
    Transition{14, live,                                     Sight::limit_removed,    State::withdrawn,    Event::withdrawn,       false, "limit_removed"},
    Transition{14, live,                                     Sight::out_of_scope,     State::withdrawn,    Event::withdrawn,       false, "out_of_scope"},
};
// clang-format on

// An alert as the table holds it, between turns or after one.
struct Alert {
    std::optional<std::int64_t> alert_id;  // null until the database gives one
    SubjectKey key;
    Measure measure = Measure::exposure;
    Severity severity = Severity::warning;
    State state = State::none;
    std::optional<model::Time> due_at;
    double observed = 0.0;
    double level = 0.0;  // of its severity
    double worst_observed = 0.0;
    model::Held held = model::Held::no;
    std::int64_t row_version = 1;
    std::optional<double> acknowledged_observed;  // what was observed when it was taken up
    std::string owner;                            // who looks after it, by its limit
    std::string end_reason;                       // of an ended one
    friend bool operator==(Alert const&, Alert const&) = default;
};

// A limit's exception for one subject and a time; it covers what is observed up to its level.
struct Waiver {
    SubjectKey key;
    double level = 0.0;
    model::Day valid_from;
    model::Day valid_until;  // holds through the day
};

struct Move {
    Transition const* transition = nullptr;
    State from = State::none;
    State to = State::open;
    Severity severity = Severity::warning;
    double observed = 0.0;
    double level = 0.0;
};

// An alert after the turn, and the moves that took it there; without moves only figures changed.
struct Outcome {
    Alert alert;
    std::vector<Move> moves;
};

// What a turn knows of its alerts.
struct Scene {
    std::span<Alert const> alerts;  // the live ones that the turn's checks reach
    Checks const& checks;           // now
    Checks const* checks_before;    // at the end of the last turn; null where there was none
    Limits const& limits;           // now
    bool limits_changed = false;    // limits.yaml rules otherwise than in checks_before
    std::span<Waiver const> waivers = {};
    model::Instant as_of;
};

// What the turn makes of every alert: those that move, open or show another figure. One step of the
// table after another until none applies.
std::vector<Outcome> advance(Scene const& scene);

// The table as text, a line a row.
std::string life_table();

}  // namespace alerts
