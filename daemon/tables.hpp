#pragma once

#include "alerts/cause.hpp"
#include "alerts/check.hpp"
#include "alerts/life.hpp"
#include "config/load.hpp"
#include "daemon/connection.hpp"
#include "model/assess.hpp"

#include <functional>
#include <map>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <variant>
#include <vector>

// Every statement on the tables, each beside the function that runs it.

namespace process {

// What made a turn happen, as the assessment says it.
enum class Trigger { start, change, time, sweep, reload, command };
inline constexpr std::pair<Trigger, std::string_view> trigger_words[] = {
    {Trigger::start, "start"}, {Trigger::change, "change"}, {Trigger::time, "time"},
    {Trigger::sweep, "sweep"}, {Trigger::reload, "reload"}, {Trigger::command, "command"}};

// The changes a turn consumed, with the inputs they touch as they are now.
struct ReadChanges {
    model::Book::Changes inputs;
    std::size_t consumed = 0;
    bool requested = false;  // somebody asked for an assessment
};

struct RulesDigests {
    std::string service;
    std::string model;
    std::string limits;
    friend bool operator==(RulesDigests const&, RulesDigests const&) = default;
};

// How much a turn assesses: every figure, or what changed counterparties have by themselves.
enum class Scope { whole, touched };
inline constexpr std::pair<Scope, std::string_view> scope_words[] = {{Scope::whole, "whole"},
                                                                     {Scope::touched, "touched"}};

// Whether an independent recomputation agrees with an assessment.
enum class Health { unverified, agrees, differs };
inline constexpr std::pair<Health, std::string_view> health_words[] = {
    {Health::unverified, "unverified"}, {Health::agrees, "agrees"}, {Health::differs, "differs"}};

// An assessment's row, less what the book says.
struct AssessmentRow {
    std::string assessment_id;
    Trigger trigger = Trigger::start;
    Scope scope = Scope::whole;
    model::Totals totals;               // touched: the expected and the defaulted loss alone
    model::Plan const* plan = nullptr;  // null where touched
    RulesDigests rules;
};

// What the newest whole assessment by some model and seed came to, and how.
struct LastWhole {
    std::variant<model::Plan, std::string> plan;  // or why it cannot be read
    double loss_quantile = 0.0;
    double expected_shortfall = 0.0;
};

// An id of the program's own making, so that a pass can be recognised after a lost connection.
std::string new_assessment_id();

// One alert's outcome with its explanation, where a move asked for one.
struct ExplainedOutcome {
    alerts::Outcome outcome;
    std::optional<alerts::Explanation> explanation;
};

// One repeatable-read transaction: everything a turn reads and writes. Any end but commit() undoes
// all of it, the consumed changes included.
class Turn {
public:
    explicit Turn(pqxx::connection& session);
    ~Turn();
    Turn(Turn const&) = delete;
    Turn& operator=(Turn const&) = delete;

    // Consumes every change visible here and reads what they touch; all inputs where `whole`.
    ReadChanges changes(bool whole);
    [[nodiscard]] model::Time as_of() const { return as_of_; }  // after that

    [[nodiscard]] std::vector<alerts::Alert> live_alerts(alerts::Reach const& reach);
    // Usage as the last assessment left it, and the rules it went by; empty before the first one.
    [[nodiscard]] alerts::Checks usage();
    [[nodiscard]] std::optional<RulesDigests> rules_of_last_assessment();
    [[nodiscard]] std::optional<LastWhole> last_whole(std::string const& model_digest,
                                                      std::uint64_t seed);

    // Writes only what differs. `before`: what the tables of figures hold; null where that is not
    // known, and all of them, `usage` with them, are compared row by row.
    void write(AssessmentRow const& assessment, alerts::Stage const* before,
               alerts::Stage const& now, alerts::Differences const& usage,
               std::span<ExplainedOutcome const> outcomes);
    void write_rules(config::Rules const& rules, RulesDigests const& digests);
    void commit();

private:
    struct Impl;
    std::unique_ptr<Impl> impl_;
    model::Time as_of_;
};

// The writer's session.
class Tables {
public:
    explicit Tables(Connection connection);

    // One cheap look: changes to consume, and an acknowledgement that is due.
    struct Waiting {
        bool changes = false;
        bool due = false;
    };
    Waiting waiting();
    Turn begin();

private:
    Connection connection_;
};

// --- what the commands read and do, each under the role its task needs ---

// A result as text, by column; NULL is nothing.
using Cell = std::optional<std::string>;
struct Column {
    enum class Kind { text, integer, figure, list, json };
    std::string name;
    Kind kind = Kind::text;
};
struct Rows {
    std::vector<Column> columns;
    std::vector<std::vector<Cell>> rows;

    // A cell by its column's name; the column exists.
    [[nodiscard]] Cell const& at(std::size_t row, std::string_view column) const;
};

Rows read_alerts(Connection& connection, bool ended_too);
Rows read_alert(Connection& connection, std::int64_t alert_id);
Rows read_alert_events(Connection& connection, std::int64_t alert_id);
Rows read_risk(Connection& connection, std::optional<std::string> const& counterparty_id);
Rows read_facilities(Connection& connection, std::string const& counterparty_id);
Rows read_usage(Connection& connection, std::optional<std::string> const& limit_id);
Rows read_set_aside(Connection& connection);
// The newest assessment.
Rows read_last_assessment(Connection& connection);
// The newest whole one; after a request was consumed, the newest that was asked for since.
Rows read_assessment(Connection& connection, std::optional<std::int64_t> after_sequence);

// As the engine: what an independent recomputation found of an assessment.
void set_health(Connection& connection, std::string const& assessment_id, Health health);

// The inputs as they are, and what the newest whole assessment left, in one read-only transaction.
struct Snapshot {
    model::Book::Changes inputs;  // whole
    model::Time taken_at;
    struct Whole {
        std::string assessment_id;
        std::string book_digest;
        std::string model_digest;
        model::Time as_of;
        std::variant<model::Plan, std::string> plan;  // or why it cannot be read
    };
    std::optional<Whole> last_whole;
    // By counterparty, as the newest assessment left them; its id.
    std::map<std::string, double, std::less<>> es_contribution;
    std::string es_contribution_of;
};
Snapshot read_snapshot(Connection& connection);

// Times are shown in this zone.
void show_times_in(Connection& connection, std::string const& time_zone);

// Asks the running program for an assessment.
struct Request {
    std::int64_t change_id = 0;
    std::int64_t last_sequence = 0;  // of the newest assessment then
};
Request request_assessment(Connection& connection);
bool is_consumed(Connection& connection, Request const& request);

std::int64_t acknowledge(Connection& connection, std::int64_t alert_id, std::string const& note,
                         model::Time due_at);
std::int64_t take_back(Connection& connection, std::int64_t alert_id, std::string const& note);

}  // namespace process
