#include "daemon/tables.hpp"

#include "daemon/digest.hpp"

#include <boost/uuid/random_generator.hpp>
#include <boost/uuid/uuid_io.hpp>
#include <fmt/format.h>
#include <nlohmann/json.hpp>
#include <pqxx/pqxx>

#include <algorithm>
#include <array>
#include <bit>
#include <charconv>
#include <cmath>
#include <functional>
#include <iterator>
#include <limits>
#include <map>

namespace process {
namespace {

using alerts::word;
using model::Day;
using model::Time;

// Above this many keys a turn reads whole tables rather than picking rows.
constexpr std::size_t keys_at_most = 50'000;

// --- text to values -----------------------------------------------------------------------------

std::string_view view(pqxx::field const& field) {
    return {field.c_str(), field.size()};
}

std::string text_of(pqxx::field const& field) {
    return std::string{view(field)};
}

// Feeds write nothing as NULL or as an empty text.
std::optional<std::string> maybe_text(pqxx::field const& field) {
    return field.size() == 0 ? std::nullopt : std::optional{text_of(field)};
}

// Any number PostgreSQL writes; what a double cannot hold becomes infinite, never another number.
double number_of(pqxx::field const& field) {
    auto const text = view(field);
    double value = std::numeric_limits<double>::quiet_NaN();
    auto const [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
    if (error == std::errc::result_out_of_range) {
        // Too small is 0, too large is infinite: a digit before the point tells them apart.
        bool const large = text.find_first_of("123456789") < text.find('.');
        return large ? std::numeric_limits<double>::infinity() : 0.0;
    }
    return end == text.data() + text.size() ? value : std::numeric_limits<double>::quiet_NaN();
}

std::optional<double> maybe_number(pqxx::field const& field) {
    return field.is_null() ? std::nullopt : std::optional{number_of(field)};
}

constexpr Day earliest = std::chrono::sys_days{std::chrono::year{1} / 1 / 1};
constexpr Day latest = std::chrono::sys_days{std::chrono::year{9999} / 12 / 31};

int digits_of(std::string_view text) {
    int value = 0;
    std::from_chars(text.data(), text.data() + text.size(), value);
    return value;
}

// An ISO date as PostgreSQL writes it. Days before year 1 and after year 9999, and both infinities,
// are the first and the last of these.
Day day_of(std::string_view text) {
    if (text == "infinity") return latest;
    if (text == "-infinity" || text.ends_with("BC")) return earliest;
    auto const first_dash = text.find('-');
    int const year = digits_of(text.substr(0, first_dash));
    if (year > 9999) return latest;
    auto const rest = text.substr(first_dash + 1);
    return std::chrono::sys_days{
        std::chrono::year{year} /
        std::chrono::month{static_cast<unsigned>(digits_of(rest.substr(0, 2)))} /
        std::chrono::day{static_cast<unsigned>(digits_of(rest.substr(3, 2)))}};
}

// A timestamptz as PostgreSQL writes it in UTC: 2026-03-31 07:30:00.25+00.
Time time_of(std::string_view text) {
    auto const space = text.find(' ');
    Day const day = day_of(text.substr(0, space));
    if (space == std::string_view::npos || text.ends_with("BC") || day >= latest) return day;
    auto const clock = text.substr(space + 1);
    auto time = Time{day} + std::chrono::hours{digits_of(clock.substr(0, 2))} +
                std::chrono::minutes{digits_of(clock.substr(3, 2))} +
                std::chrono::seconds{digits_of(clock.substr(6, 2))};
    if (clock.size() > 8 && clock[8] == '.') {
        int scale = 100'000;
        for (std::size_t i = 9; i < clock.size() && clock[i] >= '0' && clock[i] <= '9'; ++i) {
            time += std::chrono::microseconds{(clock[i] - '0') * scale};
            scale /= 10;
        }
    }
    return time;
}

template <class Enum, std::size_t Size>
Enum word_of(std::pair<Enum, std::string_view> const (&words)[Size], pqxx::field const& field) {
    if (auto const value = alerts::find(words, view(field))) return *value;
    throw std::runtime_error(
        fmt::format("the table holds '{}', which is no word of ours", view(field)));
}

model::Held held_of(pqxx::field const& field) {
    return field.is_null() ? model::Held::no : word_of(alerts::held_words, field);
}

// --- values to text -----------------------------------------------------------------------------

std::string number(double value) {
    return fmt::format("{}", value);
}

std::string money(model::Money amount) {
    auto const thousandths = amount.thousandths();
    auto const size = static_cast<std::uint64_t>(std::abs(thousandths));
    return fmt::format("{}{}.{:03}", thousandths < 0 ? "-" : "", size / 1000, size % 1000);
}

Cell maybe(std::optional<double> value) {
    return value ? Cell{number(*value)} : std::nullopt;
}

Cell held_text(model::Held held) {
    return held == model::Held::no ? std::nullopt
                                   : Cell{std::string{word(alerts::held_words, held)}};
}

std::string array_of(std::span<std::string const> items) {
    std::string text = "{";
    for (auto const& item : items) {
        if (text.size() > 1) text += ',';
        text += '"';
        for (char const c : item) {
            if (c == '"' || c == '\\') text += '\\';
            text += c;
        }
        text += '"';
    }
    return text + "}";
}

char const* pointer(Cell const& cell) {
    return cell ? cell->c_str() : nullptr;
}

nlohmann::json json_of(alerts::Position const& position) {
    nlohmann::json json{{"observed", position.observed}, {"level", nullptr}};
    if (position.level) json["level"] = *position.level;
    return json;
}

std::string json_of(alerts::Cause const& cause) {
    nlohmann::json parts = nlohmann::json::array();
    for (auto const& [part, amount] : cause.parts)
        parts.push_back({{"part", word(alerts::part_words, part)}, {"amount", amount}});
    return nlohmann::json{
        {"before", json_of(cause.before)}, {"after", json_of(cause.after)}, {"parts", parts}}
        .dump();
}

// A JSON number, or the word for what JSON has none for.
nlohmann::json json_of(double value) {
    return std::isfinite(value) ? nlohmann::json(value) : nlohmann::json(number(value));
}

double double_of(nlohmann::json const& json) {
    return json.is_string() ? std::stod(json.get<std::string>()) : json.get<double>();
}

// Names every field, so that one more in the plan does not compile without its place here.
nlohmann::json json_of(model::Plan const& plan) {
    auto const& [inversion, seed, scramblings, mixture, damping, period, lowest, nodes, width, unit,
                 large_from, effective_share, strain] = plan;
    auto components = nlohmann::json::array();
    for (auto const& [mean, points] : mixture)
        components.push_back(
            {{"mean", std::vector<double>(mean.begin(), mean.end())}, {"points", points}});
    return {{"inversion", word(model::inversion_words, inversion)},
            {"seed", seed},
            {"scramblings", scramblings},
            {"mixture", std::move(components)},
            {"damping", json_of(damping)},
            {"period", json_of(period)},
            {"lowest", json_of(lowest)},
            {"nodes", nodes},
            {"width", json_of(width)},
            {"large_from", json_of(large_from)},
            {"unit", json_of(unit)},
            {"effective_share", json_of(effective_share)},
            {"strain", json_of(strain)}};
}

// Throws where a field is missing or of another kind.
model::Plan plan_of(nlohmann::json const& json) {
    model::Plan plan;
    auto& [inversion, seed, scramblings, mixture, damping, period, lowest, nodes, width, unit,
           large_from, effective_share, strain] = plan;
    auto const text = json.at("inversion").get<std::string>();
    auto const known = alerts::find(model::inversion_words, text);
    if (!known) throw std::invalid_argument("no such inversion: " + text);
    inversion = *known;
    json.at("seed").get_to(seed);
    json.at("scramblings").get_to(scramblings);
    for (auto const& component : json.at("mixture")) {
        auto const mean = component.at("mean").get<std::vector<double>>();
        mixture.push_back(
            {Eigen::Map<Eigen::VectorXd const>(mean.data(), static_cast<Eigen::Index>(mean.size())),
             component.at("points").get<std::uint32_t>()});
    }
    damping = double_of(json.at("damping"));
    period = double_of(json.at("period"));
    lowest = double_of(json.at("lowest"));
    json.at("nodes").get_to(nodes);
    width = double_of(json.at("width"));
    large_from = double_of(json.at("large_from"));
    unit = double_of(json.at("unit"));
    effective_share = double_of(json.at("effective_share"));
    strain = double_of(json.at("strain"));
    return plan;
}

std::variant<model::Plan, std::string> readable_plan(pqxx::field const& field) {
    try {
        return plan_of(nlohmann::json::parse(view(field)));
    } catch (std::exception const& fault) {
        return std::string{fault.what()};
    }
}

// A statement that the session plans once, for the few rows of every turn; ready to be run, alone
// or together with others in one round trip.
template <class... Parameters>
std::string prepared(pqxx::transaction_base& work, std::string const& name,
                     std::string const& statement, Parameters const&... parameters) {
    auto& session = work.conn();
    session.prepare(name, statement);
    session.prepare_now(name);  // nothing where it is already
    std::array<std::string, sizeof...(parameters)> const quoted{work.quote(parameters)...};
    return quoted.empty() ? "EXECUTE " + name
                          : fmt::format("EXECUTE {}({})", name, fmt::join(quoted, ", "));
}

// Statements whose results nobody waits for, so that they go to the server together.
class Batch {
public:
    explicit Batch(pqxx::transaction_base& work) : work_{work} {}

    void add(std::string const& statement) {
        text_ += statement + ";\n";
        if (text_.size() > largest) run();
    }
    void run() {
        if (!text_.empty()) work_.exec(text_);
        text_.clear();
    }

private:
    static constexpr std::size_t largest = 1'000'000;
    pqxx::transaction_base& work_;
    std::string text_;
};

// --- the three tables of figures -----------------------------------------------------------------

// A table of figures is compared with what it shall hold, and only rows that differ are written.
struct FigureTable {
    std::string_view name;
    std::string_view keys;
    std::string_view values;  // beside the keys and assessment_id
};
constexpr FigureTable counterparty_risk{
    "counterparty_risk", "counterparty_id",
    "grade, flags, exposure_at_default, default_probability, downgrade_probability, expected_loss, "
    "standalone_loss_deviation, var_contribution, var_contribution_error, es_contribution, "
    "es_contribution_error"};
constexpr FigureTable facility_exposure{"facility_exposure", "exposure_id",
                                        "counterparty_id, exposure_at_default, rate_used, flags"};
constexpr FigureTable limit_usage{
    "limit_usage", "limit_id, subject_kind, subject",
    "measure, unit, observed, observed_error, warning_level, breach_level, headroom, standing, "
    "held_reason"};

std::string with_prefix(std::string_view columns, std::string_view prefix) {
    std::string text{prefix};
    for (char const c : columns) {
        text += c;
        if (c == ' ') text += prefix;
    }
    return text;
}

std::vector<std::string> split(std::string_view columns) {
    std::vector<std::string> names;
    for (std::size_t start = 0; start < columns.size();) {
        auto const end = std::min(columns.find(", ", start), columns.size());
        names.emplace_back(columns.substr(start, end - start));
        start = end + 2;
    }
    return names;
}

void prepare(pqxx::transaction_base& work, FigureTable const& table) {
    work.exec(
        fmt::format("CREATE TEMPORARY TABLE next_{0} ON COMMIT DELETE ROWS AS SELECT {1}, {2} FROM "
                    "loadline.{0} "
                    "WITH NO DATA",
                    table.name, table.keys, table.values));
}

template <std::size_t Columns>
using TableRows = std::vector<std::array<Cell, Columns>>;

// Up to so many rows go as one parameter of a statement; more are copied into a temporary table.
constexpr std::size_t few = 50;

// Rows as JSON objects whose texts the table's own types read.
template <std::size_t Columns>
std::string json_of(TableRows<Columns> const& rows, std::vector<std::string> const& columns) {
    auto array = nlohmann::json::array();
    for (auto const& row : rows) {
        auto object = nlohmann::json::object();
        for (std::size_t c = 0; c < Columns; ++c) {
            auto& value = object[columns[c]];
            if (row[c]) value = *row[c];
        }
        array.push_back(std::move(object));
    }
    return array.dump();
}

std::string same_row(FigureTable const& table) {
    return fmt::format("({}) = ({})", with_prefix(table.keys, "old."),
                       with_prefix(table.keys, "next."));
}

std::vector<std::string> columns_of(FigureTable const& table) {
    auto columns = split(table.keys);
    std::ranges::move(split(table.values), std::back_inserter(columns));
    return columns;
}

template <std::size_t Columns>
std::string write_few(pqxx::transaction_base& work, FigureTable const& table,
                      TableRows<Columns> const& rows, std::string const& assessment_id) {
    std::string set;
    for (auto const& value : split(table.values)) set += fmt::format("{0} = excluded.{0}, ", value);
    return prepared(
        work, fmt::format("write_{}", table.name),
        fmt::format("INSERT INTO loadline.{0} ({1}, {2}, assessment_id) "
                    "SELECT {1}, {2}, $1::uuid "
                    "FROM jsonb_populate_recordset(NULL::loadline.{0}, $2::jsonb) "
                    "ON CONFLICT ({1}) DO UPDATE SET {3}assessment_id = excluded.assessment_id",
                    table.name, table.keys, table.values, set),
        assessment_id, json_of(rows, columns_of(table)));
}

// Copies the rows beside the table, and writes there those that differ.
template <std::size_t Columns>
void write_many(pqxx::transaction_base& work, FigureTable const& table,
                TableRows<Columns> const& rows, std::string const& assessment_id) {
    pqxx::stream_to stream{work, fmt::format("next_{}", table.name), columns_of(table)};
    for (auto const& row : rows) {
        std::array<char const*, Columns> line{};
        std::ranges::transform(row, line.begin(), pointer);
        stream << line;
    }
    stream.complete();
    auto const updated = work.exec_params(
        fmt::format("UPDATE loadline.{0} AS old SET ({1}, assessment_id) = ROW ({2}, $1::uuid) "
                    "FROM next_{0} AS next WHERE {3} AND ROW ({4}) IS DISTINCT FROM ROW ({2})",
                    table.name, table.values, with_prefix(table.values, "next."), same_row(table),
                    with_prefix(table.values, "old.")),
        assessment_id);
    if (updated.affected_rows() == rows.size()) return;
    // Into a table that was empty until now an anti-join is planned badly.
    work.exec_params(fmt::format("INSERT INTO loadline.{0} ({1}, {2}, assessment_id) "
                                 "SELECT {1}, {2}, $1::uuid FROM next_{0} ON CONFLICT DO NOTHING",
                                 table.name, table.keys, table.values),
                     assessment_id);
}

// What a table of figures shall hold: all of it, or what differs from what it holds.
template <std::size_t Columns, std::size_t Keys>
struct Content {
    bool all = false;
    TableRows<Columns> rows;
    TableRows<Keys> gone;
};

template <std::size_t Columns, std::size_t Keys>
void bring_up_to(pqxx::transaction_base& work, Batch& batch, FigureTable const& table,
                 Content<Columns, Keys> const& content, std::string const& assessment_id) {
    if (content.all || content.rows.size() > few)
        write_many(work, table, content.rows, assessment_id);
    else if (!content.rows.empty())
        batch.add(write_few(work, table, content.rows, assessment_id));
    if (content.all)
        work.exec(
            fmt::format("DELETE FROM loadline.{0} AS old "
                        "WHERE NOT EXISTS (SELECT FROM next_{0} AS next WHERE {1})",
                        table.name, same_row(table)));
    else if (!content.gone.empty())
        work.exec_params(
            fmt::format("DELETE FROM loadline.{0} AS old "
                        "USING jsonb_populate_recordset(NULL::loadline.{0}, $1::jsonb) AS next "
                        "WHERE {1}",
                        table.name, same_row(table)),
            json_of(content.gone, split(table.keys)));
}

// --- reading the inputs --------------------------------------------------------------------------

// SHA-256 of a row as text under this session's fixed settings, with its table's name before it.
std::string hashed(std::string_view table) {
    return fmt::format("encode(sha256(convert_to('{0}' || t::text, 'UTF8')), 'hex')", table);
}

// Reads rows of one input table, all of them or those of some counterparties.
std::string input_rows(pqxx::transaction_base& work, std::string_view table,
                       std::string_view columns, std::string_view order,
                       std::optional<std::string> const& keys) {
    auto const statement = fmt::format(
        "SELECT {0}, {1} FROM loadline.{2} AS t{3} ORDER BY {4}", columns, hashed(table), table,
        keys ? " WHERE counterparty_id = ANY ($1::text[])" : "", order);
    return keys ? prepared(work, fmt::format("read_{}", table), statement, *keys) : statement;
}

// The inputs of counterparties by id; all of them without keys.
std::vector<model::Inputs> read_counterparties(pqxx::transaction_base& work,
                                               std::optional<std::vector<std::string>> const& ids) {
    std::map<std::string, model::Inputs> inputs;
    std::optional<std::string> keys;
    if (ids) {
        keys = array_of(*ids);
        for (auto const& id : *ids) inputs[id].counterparty_id = id;
    }
    auto const of = [&](pqxx::row const& row) -> model::Inputs& {
        auto& entry = inputs[text_of(row[0])];
        if (entry.counterparty_id.empty()) entry.counterparty_id = text_of(row[0]);
        entry.digest += digest_from(view(row.back()));
        return entry;
    };
    std::array const statements{
        input_rows(work, "counterparty",
                   "counterparty_id, legal_name, segment, sector, country, country_of_risk, lei, "
                   "asset_correlation",
                   "counterparty_id", keys),
        input_rows(work, "rating", "counterparty_id, source, rated_at, grade",
                   "counterparty_id, source, rated_at", keys),
        input_rows(work, "exposure",
                   "counterparty_id, exposure_id, product, currency, drawn, undrawn, "
                   "conversion_factor, committed, add_on, collateral, netting_set, "
                   "loss_given_default, maturity",
                   "counterparty_id, exposure_id", keys),
        input_rows(work, "group_member", "counterparty_id, group_id, valid_from, valid_until",
                   "counterparty_id, group_id, valid_from", keys)};
    pqxx::pipeline together{work};
    together.retain(static_cast<int>(statements.size()));
    for (auto const& statement : statements) together.insert(statement);
    together.resume();
    for (auto const& row : together.retrieve().second)
        of(row).row = model::CounterpartyRow{.legal_name = text_of(row[1]),
                                             .segment = text_of(row[2]),
                                             .sector = maybe_text(row[3]),
                                             .country = maybe_text(row[4]),
                                             .country_of_risk = maybe_text(row[5]),
                                             .lei = maybe_text(row[6]),
                                             .asset_correlation = maybe_number(row[7])};
    for (auto const& row : together.retrieve().second)
        of(row).ratings.push_back({text_of(row[1]), time_of(view(row[2])), text_of(row[3])});
    for (auto const& row : together.retrieve().second)
        of(row).exposures.push_back(
            {.exposure_id = text_of(row[1]),
             .product = text_of(row[2]),
             .currency = text_of(row[3]),
             .drawn = number_of(row[4]),
             .undrawn = number_of(row[5]),
             .conversion_factor = maybe_number(row[6]),
             .committed = view(row[7]) == "t",
             .add_on = number_of(row[8]),
             .collateral = number_of(row[9]),
             .netting_set = maybe_text(row[10]),
             .loss_given_default = maybe_number(row[11]),
             .maturity = row[12].is_null() ? std::nullopt : std::optional{day_of(view(row[12]))}});
    for (auto const& row : together.retrieve().second)
        of(row).memberships.push_back(
            {.group_id = text_of(row[1]),
             .valid_from = day_of(view(row[2])),
             .valid_until = row[3].is_null() ? std::nullopt : std::optional{day_of(view(row[3]))}});
    std::vector<model::Inputs> all;
    all.reserve(inputs.size());
    for (auto& [id, entry] : inputs) all.push_back(std::move(entry));
    return all;
}

model::Shared read_shared(pqxx::transaction_base& work) {
    model::Shared shared;
    for (auto const& row :
         work.exec(input_rows(work, "fx_rate", "currency, quoted_on, base_per_unit",
                              "currency, quoted_on", std::nullopt))) {
        shared.rates[text_of(row[0])].push_back({day_of(view(row[1])), number_of(row[2])});
        shared.digest += digest_from(view(row.back()));
    }
    for (auto const& row : work.exec(
             input_rows(work, "capital", "kind, as_of, amount", "kind, as_of", std::nullopt))) {
        shared.capital[text_of(row[0])].push_back({day_of(view(row[1])), number_of(row[2])});
        shared.digest += digest_from(view(row.back()));
    }
    for (auto const& row : work.exec(
             input_rows(work, "connected_group", "group_id, name", "group_id", std::nullopt))) {
        shared.group_names[text_of(row[0])] = text_of(row[1]);
        shared.digest += digest_from(view(row.back()));
    }
    return shared;
}

}  // namespace

std::string new_assessment_id() {
    return to_string(boost::uuids::random_generator{}());
}

struct Turn::Impl {
    explicit Impl(pqxx::connection& session) : work{session} {}
    pqxx::transaction<pqxx::repeatable_read> work;
    Batch batch{work};  // what the turn writes

    void write_assessment(AssessmentRow const& assessment, model::Book const& book);
    void write_figures(std::string const& assessment_id, alerts::Stage const* before,
                       alerts::Stage const& now, alerts::Differences const& usage);
    void write_set_aside(alerts::Stage const* before, model::Book const& book);
    void write_alert(ExplainedOutcome const& explained, std::string const& assessment_id);
};

Turn::Turn(pqxx::connection& session)
    : impl_{sorted([&] { return std::make_unique<Impl>(session); })} {}

Turn::~Turn() = default;

ReadChanges Turn::changes(bool whole) {
    return sorted([&] {
        ReadChanges read;
        std::vector<std::string> dirty;
        bool shared = false;
        auto const rows = impl_->work.exec(prepared(impl_->work, "consume", R"sql(
            WITH consumed AS (DELETE FROM loadline.change_log RETURNING src, key)
            SELECT transaction_timestamp(), c.src, c.key
            FROM (VALUES (true)) AS once LEFT JOIN consumed AS c ON true)sql"));
        as_of_ = time_of(view(rows[0][0]));
        for (auto const& row : rows) {
            if (row[1].is_null()) break;  // nothing was consumed
            ++read.consumed;
            switch (row[1].as<int>()) {
                case 0:
                    read.requested = true;
                    break;
                case 2:
                case 6:
                case 7:
                    shared = true;
                    break;
                default:
                    if (row[2].is_null())
                        whole = true;
                    else
                        dirty.push_back(text_of(row[2]));
            }
        }
        std::ranges::sort(dirty);
        auto const repeated = std::ranges::unique(dirty);
        dirty.erase(repeated.begin(), repeated.end());
        read.inputs.whole = whole || dirty.size() > keys_at_most;
        if (read.inputs.whole)
            read.inputs.counterparties = read_counterparties(impl_->work, std::nullopt);
        else if (!dirty.empty())
            read.inputs.counterparties = read_counterparties(impl_->work, dirty);
        if (shared || read.inputs.whole) read.inputs.shared = read_shared(impl_->work);
        return read;
    });
}

std::vector<alerts::Alert> Turn::live_alerts(alerts::Reach const& reach) {
    return sorted([&] {
        std::vector<std::string> limits;    // all of whose subjects are reached
        std::vector<std::string> subjects;  // reached where not all are, of any kind
        for (auto const& [limit, all] : reach.limits())
            if (all) limits.push_back(limit->limit_id);
        for (auto const kind : alerts::subject_kinds)
            std::ranges::copy(reach.touched(kind), std::back_inserter(subjects));
        std::vector<alerts::Alert> live;
        for (auto const& row :
             impl_->work.exec(prepared(impl_->work, "live_alerts", R"sql(
                SELECT a.alert_id, a.limit_id, a.subject_kind, a.subject, a.measure, a.severity, a.state, a.due_at,
                       a.observed, a.level, a.worst_observed, a.held_reason, a.row_version, coalesce(a.owner, ''),
                       (SELECT e.observed FROM loadline.alert_event AS e
                        WHERE e.alert_id = a.alert_id AND e.kind = 'acknowledged' AND a.state = 'acknowledged'
                        ORDER BY e.event_id DESC LIMIT 1)
                FROM loadline.alert AS a
                WHERE a.state NOT IN ('cured', 'withdrawn')
                    AND ($1::boolean OR a.limit_id = ANY ($2::text[]) OR a.subject = ANY ($3::text[]))
                ORDER BY a.alert_id)sql",
                                       reach.is_whole(), array_of(limits), array_of(subjects)))) {
            alerts::SubjectKey key{text_of(row[1]), word_of(alerts::subject_kind_words, row[2]),
                                   text_of(row[3])};
            if (!reach.holds(key)) continue;
            live.push_back(
                {.alert_id = row[0].as<std::int64_t>(),
                 .key = std::move(key),
                 .measure = word_of(alerts::measure_words, row[4]),
                 .severity = word_of(alerts::severity_words, row[5]),
                 .state = word_of(alerts::state_words, row[6]),
                 .due_at = row[7].is_null() ? std::nullopt : std::optional{time_of(view(row[7]))},
                 .observed = number_of(row[8]),
                 .level = number_of(row[9]),
                 .worst_observed = number_of(row[10]),
                 .held = held_of(row[11]),
                 .row_version = row[12].as<std::int64_t>(),
                 .acknowledged_observed = maybe_number(row[14]),
                 .owner = text_of(row[13]),
                 .end_reason = {}});
        }
        return live;
    });
}

alerts::Checks Turn::usage() {
    return sorted([&] {
        alerts::Checks checks;
        for (auto const& row : impl_->work.exec(
                 "SELECT limit_id, subject_kind, subject, measure, observed, observed_error, "
                 "warning_level, breach_level, held_reason FROM loadline.limit_usage"))
            checks.usages.push_back(
                {.key = {text_of(row[0]), word_of(alerts::subject_kind_words, row[1]),
                         text_of(row[2])},
                 .measure = word_of(alerts::measure_words, row[3]),
                 .observed = number_of(row[4]),
                 .observed_error = number_of(row[5]),
                 .warning_level = maybe_number(row[6]),
                 .breach_level = maybe_number(row[7]),
                 .held = held_of(row[8])});
        std::ranges::sort(checks.usages, {}, &alerts::Usage::key);
        return checks;
    });
}

std::optional<RulesDigests> Turn::rules_of_last_assessment() {
    return sorted([&]() -> std::optional<RulesDigests> {
        auto const rows = impl_->work.exec(
            "SELECT model_digest, limits_digest FROM loadline.assessment ORDER BY sequence DESC "
            "LIMIT 1");
        if (rows.empty()) return std::nullopt;
        return RulesDigests{"", text_of(rows[0][0]), text_of(rows[0][1])};
    });
}

std::optional<LastWhole> Turn::last_whole(std::string const& model_digest, std::uint64_t seed) {
    return sorted([&]() -> std::optional<LastWhole> {
        auto const rows = impl_->work.exec_params(
            R"sql(
            SELECT plan, loss_quantile, expected_shortfall FROM loadline.assessment
            WHERE scope = 'whole' AND model_digest = $1 AND plan ->> 'seed' = $2
            ORDER BY sequence DESC LIMIT 1)sql",
            model_digest, std::to_string(seed));
        if (rows.empty()) return std::nullopt;
        LastWhole last;
        last.loss_quantile = number_of(rows[0][1]);
        last.expected_shortfall = number_of(rows[0][2]);
        last.plan = readable_plan(rows[0][0]);
        return last;
    });
}

void Turn::Impl::write_assessment(AssessmentRow const& assessment, model::Book const& book) {
    auto const& settings = *book.settings();
    auto const& totals = assessment.totals;
    auto const* const plan = assessment.plan;
    auto const if_whole = [&](double value) {
        return plan != nullptr ? Cell{number(value)} : std::nullopt;
    };
    Cell const quantile = if_whole(totals.loss_quantile);
    Cell const credit_var = if_whole(totals.credit_var);
    Cell const shortfall = if_whole(totals.expected_shortfall);
    Cell const quantile_error = if_whole(totals.loss_quantile_error);
    Cell const credit_var_error = if_whole(totals.credit_var_error);
    Cell const shortfall_error = if_whole(totals.expected_shortfall_error);
    Cell const plan_json = plan != nullptr ? Cell{json_of(*plan).dump()} : std::nullopt;
    batch.add(prepared(work, "write_assessment",
                       R"sql(
        INSERT INTO loadline.assessment
            (assessment_id, scope, trigger, as_of, started_at, finished_at, seconds, program_version, engine,
             base_currency, names, book_digest, limits_digest, model_digest, confidence, horizon_years,
             expected_loss, defaulted_loss, loss_quantile, credit_var, expected_shortfall,
             loss_quantile_error, credit_var_error, expected_shortfall_error, plan)
        SELECT $1::uuid, $2, $3, transaction_timestamp(), transaction_timestamp(), t.now,
               extract(epoch FROM t.now - transaction_timestamp()), $4, $5,
               $6, $7::integer, $8, $9, $10, $11::double precision, $12::double precision,
               $13::double precision, $14::double precision, $15::double precision, $16::double precision,
               $17::double precision, $18::double precision, $19::double precision, $20::double precision, $21::jsonb
        FROM (SELECT clock_timestamp() AS now) AS t)sql",
                       assessment.assessment_id, std::string{word(scope_words, assessment.scope)},
                       std::string{word(trigger_words, assessment.trigger)}, LOADLINE_VERSION,
                       plan != nullptr ? std::string{word(model::inversion_words, plan->inversion)}
                                       : std::string{"closed form"},
                       settings.base_currency, book.names().size(), hexadecimal(book.digest()),
                       assessment.rules.limits, assessment.rules.model, number(settings.confidence),
                       settings.horizon_years, number(totals.expected_loss),
                       number(totals.defaulted_loss), pointer(quantile), pointer(credit_var),
                       pointer(shortfall), pointer(quantile_error), pointer(credit_var_error),
                       pointer(shortfall_error), pointer(plan_json)));
}

namespace {

std::array<Cell, 12> risk_row(model::Name const& name, model::NameFigures const& own,
                              model::GradeScale const& grades) {
    // A counterparty has no contributions before its first whole assessment.
    auto const known = [](double value) {
        return std::isnan(value) ? std::nullopt : Cell{number(value)};
    };
    return {{name.counterparty_id, std::string{grades.name(name.grade)}, array_of(name.flags),
             money(name.exposure_at_default), number(own.default_probability.value()),
             number(own.downgrade_probability.value()), number(own.expected_loss),
             number(own.standalone_loss_deviation), known(own.var_contribution),
             known(own.var_contribution_error), known(own.es_contribution),
             known(own.es_contribution_error)}};
}

void add_facilities(TableRows<5>& rows, model::Name const& name) {
    for (auto const& facility : name.facilities)
        rows.push_back(
            {{facility.exposure_id, name.counterparty_id, money(facility.exposure_at_default),
              number(facility.rate_used), array_of(facility.flags)}});
}

std::array<Cell, 12> usage_row(alerts::Usage const& usage) {
    auto const standing = usage.standing();
    return {{usage.key.limit_id, std::string{word(alerts::subject_kind_words, usage.key.kind)},
             usage.key.subject, std::string{word(alerts::measure_words, usage.measure)},
             std::string{word(alerts::unit_words, alerts::unit_of(usage.measure))},
             number(usage.observed), number(usage.observed_error), maybe(usage.warning_level),
             maybe(usage.breach_level), maybe(usage.headroom()),
             standing ? Cell{std::string{word(alerts::standing_words, *standing)}} : std::nullopt,
             held_text(usage.held)}};
}

// To the bit, a figure not known yet included.
bool same(model::NameFigures const& a, model::NameFigures const& b) {
    using Bits = std::array<std::uint64_t, sizeof a / sizeof(std::uint64_t)>;
    return std::bit_cast<Bits>(a) == std::bit_cast<Bits>(b);
}

}  // namespace

void Turn::Impl::write_figures(std::string const& assessment_id, alerts::Stage const* before,
                               alerts::Stage const& now, alerts::Differences const& usage) {
    using Names = alerts::View::Names;
    Names const old_names = before != nullptr ? Names{before->book.names()} : Names{};
    Names const names = now.book.names();
    auto const& grades = now.book.settings()->grades;
    Content<12, 1> risk{.all = before == nullptr, .rows = {}, .gone = {}};
    TableRows<5> old_facilities;
    TableRows<5> facilities;
    alerts::each_pair(old_names, names, [&](auto o, auto n) {
        bool const same_name = o && n && old_names[*o] == names[*n];
        bool const same_figures = o && n && same(before->figures[*o], now.figures[*n]);
        if (!n) risk.gone.push_back({{old_names[*o]->counterparty_id}});
        if (n && !(same_name && same_figures)) {
            auto row = risk_row(*names[*n], now.figures[*n], grades);
            if (!same_figures || row != risk_row(*old_names[*o], before->figures[*o],
                                                 before->book.settings()->grades))
                risk.rows.push_back(std::move(row));
        }
        if (same_name) return;
        if (o) add_facilities(old_facilities, *old_names[*o]);
        if (n) add_facilities(facilities, *names[*n]);
    });
    bring_up_to(work, batch, counterparty_risk, risk, assessment_id);

    Content<5, 1> moved{.all = before == nullptr, .rows = {}, .gone = {}};
    if (before == nullptr) {
        moved.rows = std::move(facilities);
    } else {
        auto const id = [](auto const& row) -> Cell const& { return row[0]; };
        std::ranges::sort(old_facilities, {}, id);
        std::ranges::sort(facilities, {}, id);
        std::ranges::set_difference(facilities, old_facilities, std::back_inserter(moved.rows));
        for (auto const& row : old_facilities)
            if (!std::ranges::binary_search(facilities, row[0], {}, id))
                moved.gone.push_back({{row[0]}});
    }
    bring_up_to(work, batch, facility_exposure, moved, assessment_id);

    Content<12, 3> usages{.all = before == nullptr, .rows = {}, .gone = {}};
    for (auto const& row : usage.written) usages.rows.push_back(usage_row(row));
    for (auto const& key : usage.gone)
        usages.gone.push_back(
            {{key.limit_id, std::string{word(alerts::subject_kind_words, key.kind)}, key.subject}});
    bring_up_to(work, batch, limit_usage, usages, assessment_id);
}

namespace {

// Whether what is set aside may differ between two books.
bool set_aside_moved(model::Book const& before, model::Book const& now) {
    bool moved = &before.shared() != &now.shared() || before.as_of().day != now.as_of().day;
    auto const compare = [&](alerts::View::Names old, alerts::View::Names names) {
        alerts::each_pair(old, names, [&](auto o, auto n) {
            if (o && n && old[*o] == names[*n]) return;
            moved |= (o && n) ? old[*o]->set_aside != names[*n]->set_aside
                              : !(o ? old[*o] : names[*n])->set_aside.empty();
        });
    };
    compare(before.names(), now.names());
    compare(before.unknown(), now.unknown());
    return moved;
}

}  // namespace

void Turn::Impl::write_set_aside(alerts::Stage const* before, model::Book const& book) {
    if (before != nullptr && !set_aside_moved(before->book, book)) return;
    nlohmann::json rows = nlohmann::json::array();
    for (auto const& row : book.set_aside()) {
        nlohmann::json json{{"source_table", row.source_table},
                            {"source_key", row.source_key},
                            {"reason", row.reason},
                            {"amount", nullptr}};
        if (row.amount) json["amount"] = *row.amount;
        rows.push_back(std::move(json));
    }
    auto const now = rows.dump();
    work.exec_params(R"sql(
        UPDATE loadline.set_aside AS old SET until = transaction_timestamp()
        WHERE old.until IS NULL AND NOT EXISTS (
            SELECT FROM jsonb_to_recordset($1::jsonb) AS now (source_table text, source_key text, reason text)
            WHERE (now.source_table, now.source_key, now.reason) = (old.source_table, old.source_key, old.reason)))sql",
                     now);
    work.exec_params(R"sql(
        INSERT INTO loadline.set_aside AS old (source_table, source_key, reason, amount, since)
        SELECT now.source_table, now.source_key, now.reason, max(now.amount), transaction_timestamp()
        FROM jsonb_to_recordset($1::jsonb) AS now (source_table text, source_key text, reason text, amount numeric)
        GROUP BY now.source_table, now.source_key, now.reason
        ON CONFLICT (source_table, source_key, reason) WHERE until IS NULL
        DO UPDATE SET amount = excluded.amount WHERE old.amount IS DISTINCT FROM excluded.amount)sql",
                     now);
}

// The moves of the alert just written, in $2, as events.
constexpr std::string_view write_events = R"sql(
    INSERT INTO loadline.alert_event
        (alert_id, at, actor, assessment_id, kind, from_state, to_state, severity, observed, level, note)
    SELECT w.alert_id, transaction_timestamp(), 'loadline', $1::uuid,
           m.move ->> 'kind', m.move ->> 'from_state', m.move ->> 'to_state', m.move ->> 'severity',
           (m.move ->> 'observed')::numeric, (m.move ->> 'level')::numeric, m.move ->> 'note'
    FROM written AS w, jsonb_array_elements($2::jsonb) WITH ORDINALITY AS m (move, nth)
    ORDER BY m.nth)sql";

void Turn::Impl::write_alert(ExplainedOutcome const& explained, std::string const& assessment_id) {
    auto const& [alert, moves] = explained.outcome;
    Cell nature;
    Cell cause;
    if (explained.explanation) {
        cause = json_of(explained.explanation->cause);
        if (auto const of = explained.explanation->nature)
            nature = std::string{word(alerts::nature_words, *of)};
    }
    std::string const severity{word(alerts::severity_words, alert.severity)};
    std::string const state{word(alerts::state_words, alert.state)};
    auto const held = held_text(alert.held);
    auto events = nlohmann::json::array();
    for (auto const& move : moves)
        events.push_back({{"kind", word(alerts::event_words, move.transition->event)},
                          {"from_state", word(alerts::state_words, move.from)},
                          {"to_state", word(alerts::state_words, move.to)},
                          {"severity", word(alerts::severity_words, move.severity)},
                          {"observed", number(move.observed)},
                          {"level", number(move.level)},
                          {"note", move.transition->reason}});
    if (!alert.alert_id) {
        batch.add(
            prepared(work, "open_alert", R"sql(
            WITH written AS (
                INSERT INTO loadline.alert
                    (limit_id, subject_kind, subject, measure, severity, state, nature, episode, observed, level,
                     worst_observed, held_reason, opened_at, opened_by_assessment, changed_at, changed_by_assessment,
                     cause, owner)
                SELECT $3, $4, $5, $6, $7, $8, $9, 1 + coalesce(max(a.episode), 0), $10::numeric, $11::numeric,
                       $12::numeric, $13, transaction_timestamp(), $1::uuid, transaction_timestamp(), $1::uuid,
                       $14::jsonb, nullif($15, '')
                FROM loadline.alert AS a
                WHERE (a.limit_id, a.subject_kind, a.subject) = ($3, $4, $5)
                RETURNING alert_id))sql" + std::string{write_events},
                     assessment_id, events.dump(), alert.key.limit_id,
                     std::string{word(alerts::subject_kind_words, alert.key.kind)},
                     alert.key.subject, std::string{word(alerts::measure_words, alert.measure)},
                     severity, state, pointer(nature), number(alert.observed), number(alert.level),
                     number(alert.worst_observed), pointer(held), pointer(cause), alert.owner));
        return;
    }
    bool const ended =
        alert.state == alerts::State::cured || alert.state == alerts::State::withdrawn;
    batch.add(prepared(work, "update_alert", R"sql(
        WITH written AS (
            UPDATE loadline.alert SET
                measure = $4, severity = $5, state = $6, observed = $7::numeric, level = $8::numeric,
                worst_observed = $9::numeric, held_reason = $10, row_version = $11::bigint,
                due_at = CASE WHEN $6 = 'acknowledged' THEN due_at END,
                nature = CASE WHEN $12::jsonb IS NULL THEN nature ELSE coalesce($13, nature) END,
                cause = coalesce($12::jsonb, cause),
                changed_at = CASE WHEN $14::boolean THEN transaction_timestamp() ELSE changed_at END,
                changed_by_assessment = CASE WHEN $14::boolean THEN $1::uuid ELSE changed_by_assessment END,
                ended_at = CASE WHEN $15::boolean THEN transaction_timestamp() END,
                end_reason = $16,
                owner = nullif($17, '')
            WHERE alert_id = $3::bigint
            RETURNING alert_id))sql" + std::string{write_events},
                       assessment_id, events.dump(), *alert.alert_id,
                       std::string{word(alerts::measure_words, alert.measure)}, severity, state,
                       number(alert.observed), number(alert.level), number(alert.worst_observed),
                       pointer(held), alert.row_version, pointer(cause), pointer(nature),
                       !moves.empty(), ended, ended ? alert.end_reason.c_str() : nullptr,
                       alert.owner));
}

void Turn::write(AssessmentRow const& assessment, alerts::Stage const* before,
                 alerts::Stage const& now, alerts::Differences const& usage,
                 std::span<ExplainedOutcome const> outcomes) {
    sorted([&] {
        impl_->write_figures(assessment.assessment_id, before, now, usage);
        impl_->write_set_aside(before, now.book);
        for (auto const& outcome : outcomes) impl_->write_alert(outcome, assessment.assessment_id);
        impl_->write_assessment(assessment, now.book);
        impl_->batch.run();
    });
}

void Turn::write_rules(config::Rules const& rules, RulesDigests const& digests) {
    sorted([&] {
        auto const write = [&](std::string const& kind, std::string const& digest,
                               config::Files const& files) {
            impl_->work.exec_params(
                R"sql(
                UPDATE loadline.config_version SET ruled_to = transaction_timestamp()
                WHERE kind = $1 AND digest <> $2 AND ruled_to IS NULL)sql",
                kind, digest);
            impl_->work.exec_params(
                R"sql(
                INSERT INTO loadline.config_version AS v (kind, digest, files, loaded_at, loaded_by, ruled_from)
                VALUES ($1, $2, $3::jsonb, transaction_timestamp(), session_user, transaction_timestamp())
                ON CONFLICT (kind, digest) DO UPDATE SET ruled_from = excluded.ruled_from, ruled_to = NULL
                WHERE v.ruled_to IS NOT NULL)sql",
                kind, digest, nlohmann::json(files).dump());
        };
        write("service", digests.service, rules.service_files);
        write("model", digests.model, rules.model_files);
        write("limits", digests.limits, rules.limits_files);
    });
}

void Turn::commit() {
    sorted([&] { impl_->work.commit(); });
}

Tables::Tables(Connection connection) : connection_{std::move(connection)} {
    sorted([&] {
        pqxx::work work{connection_.session()};
        prepare(work, counterparty_risk);
        prepare(work, facility_exposure);
        prepare(work, limit_usage);
        work.commit();
    });
}

Tables::Waiting Tables::waiting() {
    return sorted([&] {
        pqxx::nontransaction work{connection_.session()};
        auto const row = work.exec1(prepared(work, "waiting", R"sql(
            SELECT EXISTS (SELECT FROM loadline.change_log),
                   EXISTS (SELECT FROM loadline.alert WHERE state = 'acknowledged' AND due_at <= now()))sql"));
        return Waiting{.changes = row[0].as<bool>(), .due = row[1].as<bool>()};
    });
}

Turn Tables::begin() {
    return Turn{connection_.session()};
}

// --- commands ------------------------------------------------------------------------------------

namespace {

Column::Kind kind_of(pqxx::oid type) {
    switch (type) {
        case 20:
        case 21:
        case 23:
            return Column::Kind::integer;  // bigint, smallint, integer
        case 701:
        case 1700:
            return Column::Kind::figure;  // double precision, numeric
        case 1009:
            return Column::Kind::list;  // text[]
        case 3802:
            return Column::Kind::json;  // jsonb
        default:
            return Column::Kind::text;
    }
}

Rows rows_of(pqxx::result const& result) {
    Rows rows;
    for (pqxx::row::size_type column = 0; column < result.columns(); ++column)
        rows.columns.push_back({result.column_name(column), kind_of(result.column_type(column))});
    for (auto const& row : result) {
        auto& cells = rows.rows.emplace_back();
        for (auto const& field : row)
            cells.push_back(field.is_null() ? std::nullopt : Cell{text_of(field)});
    }
    return rows;
}

template <class... Parameters>
Rows read(Connection& connection, std::string const& statement, Parameters const&... parameters) {
    return sorted([&] {
        pqxx::nontransaction work{connection.session()};
        return rows_of(work.exec_params(statement, parameters...));
    });
}

// Times in the session's zone, with its offset.
std::string time_column(std::string_view column, std::string_view name) {
    return fmt::format("to_char({}, 'YYYY-MM-DD\"T\"HH24:MI:SSOF') AS {}", column, name);
}

}  // namespace

Cell const& Rows::at(std::size_t row, std::string_view column) const {
    auto const found = std::ranges::find(columns, column, &Column::name);
    return rows.at(row).at(static_cast<std::size_t>(found - columns.begin()));
}

Rows read_alerts(Connection& connection, bool ended_too) {
    return read(
        connection,
        fmt::format(R"sql(
        SELECT a.alert_id, a.state, a.severity, a.limit_id, a.subject_kind, a.subject, n.name, a.measure, a.observed, a.level,
               CASE WHEN a.level > 0 THEN a.observed / a.level END AS utilisation,
               a.nature, a.held_reason, a.owner, a.episode, {}, {}, {}, a.end_reason
        FROM loadline.alert AS a
        LEFT JOIN loadline.subject_name AS n USING (subject_kind, subject)
        WHERE $1 OR a.state NOT IN ('cured', 'withdrawn')
        ORDER BY a.state IN ('cured', 'withdrawn'), a.severity, a.state <> 'open',
                 a.observed / nullif(a.level, 0) DESC NULLS FIRST, a.alert_id)sql",
                    time_column("a.opened_at", "opened_at"), time_column("a.due_at", "due_at"),
                    time_column("a.ended_at", "ended_at")),
        ended_too);
}

Rows read_alert(Connection& connection, std::int64_t alert_id) {
    return read(
        connection,
        fmt::format(R"sql(
        SELECT a.alert_id, a.limit_id, a.subject_kind, a.subject, n.name, a.measure, a.severity, a.state, a.nature, a.owner, a.episode,
               a.observed, a.level, CASE WHEN a.level > 0 THEN a.observed / a.level END AS utilisation, a.worst_observed,
               a.held_reason, {}, a.opened_by_assessment, {}, a.changed_by_assessment, {}, {}, a.end_reason,
               a.row_version, a.cause,
               (SELECT s.base_currency FROM loadline.assessment AS s ORDER BY s.sequence DESC LIMIT 1) AS base_currency
        FROM loadline.alert AS a
        LEFT JOIN loadline.subject_name AS n USING (subject_kind, subject)
        WHERE a.alert_id = $1)sql",
                    time_column("a.opened_at", "opened_at"),
                    time_column("a.changed_at", "changed_at"), time_column("a.due_at", "due_at"),
                    time_column("a.ended_at", "ended_at")),
        alert_id);
}

Rows read_alert_events(Connection& connection, std::int64_t alert_id) {
    return read(connection,
                fmt::format(R"sql(
        SELECT event_id, {}, actor, kind, from_state, to_state, severity, observed, level, note
        FROM loadline.alert_event WHERE alert_id = $1 ORDER BY event_id)sql",
                            time_column("at", "at")),
                alert_id);
}

Rows read_risk(Connection& connection, std::optional<std::string> const& counterparty_id) {
    return read(connection, R"sql(
        SELECT r.counterparty_id, n.name, r.grade, r.flags, r.exposure_at_default, r.default_probability,
               r.downgrade_probability, r.expected_loss, r.standalone_loss_deviation, r.var_contribution,
               r.var_contribution_error, r.es_contribution, r.es_contribution_error
        FROM loadline.counterparty_risk AS r
        LEFT JOIN loadline.subject_name AS n ON n.subject_kind = 'name' AND n.subject = r.counterparty_id
        WHERE $1::text IS NULL OR r.counterparty_id = $1
        ORDER BY r.es_contribution DESC NULLS LAST, r.counterparty_id)sql",
                pointer(counterparty_id));
}

Rows read_facilities(Connection& connection, std::string const& counterparty_id) {
    return read(connection, R"sql(
        SELECT exposure_id, exposure_at_default, rate_used, flags
        FROM loadline.facility_exposure WHERE counterparty_id = $1
        ORDER BY exposure_at_default DESC, exposure_id)sql",
                counterparty_id);
}

Rows read_usage(Connection& connection, std::optional<std::string> const& limit_id) {
    return read(connection, R"sql(
        SELECT u.limit_id, u.subject_kind, u.subject, n.name, u.measure, u.unit, u.observed, u.observed_error,
               u.warning_level, u.breach_level, u.headroom,
               CASE WHEN u.breach_level > 0 THEN u.observed / u.breach_level END AS utilisation, u.standing, u.held_reason
        FROM loadline.limit_usage AS u
        LEFT JOIN loadline.subject_name AS n USING (subject_kind, subject)
        WHERE $1::text IS NULL OR u.limit_id = $1
        ORDER BY u.limit_id, u.observed / nullif(u.breach_level, 0) DESC NULLS FIRST, u.subject_kind, u.subject)sql",
                pointer(limit_id));
}

Rows read_set_aside(Connection& connection) {
    return read(connection, fmt::format(R"sql(
        SELECT source_table, source_key, reason, amount, {}
        FROM loadline.set_aside WHERE until IS NULL
        ORDER BY source_table, source_key, reason)sql",
                                        time_column("since", "since")));
}

namespace {

// The first assessment in an order, of those that hold.
Rows assessment(Connection& connection, std::string_view where, std::string_view order,
                Cell const& after) {
    return read(connection,
                fmt::format(R"sql(
        SELECT assessment_id, sequence, scope, trigger, {}, seconds, engine, health, base_currency, names,
               (SELECT count(*) FROM loadline.alert WHERE state NOT IN ('cured', 'withdrawn')) AS live_alerts,
               (SELECT count(*) FROM loadline.set_aside WHERE until IS NULL) AS rows_set_aside,
               (SELECT sum(amount) FROM loadline.set_aside WHERE until IS NULL) AS amount_set_aside,
               confidence, horizon_years, expected_loss, defaulted_loss, loss_quantile, loss_quantile_error,
               credit_var, credit_var_error, expected_shortfall, expected_shortfall_error,
               book_digest, limits_digest, model_digest, plan
        FROM loadline.assessment
        WHERE sequence > coalesce($1::bigint, 0) AND {}
        ORDER BY {} LIMIT 1)sql",
                            time_column("as_of", "as_of"), where, order),
                pointer(after));
}

}  // namespace

Rows read_last_assessment(Connection& connection) {
    return assessment(connection, "true", "sequence DESC", std::nullopt);
}

Rows read_assessment(Connection& connection, std::optional<std::int64_t> after_sequence) {
    Cell const after = after_sequence ? Cell{std::to_string(*after_sequence)} : std::nullopt;
    return assessment(connection, "scope = 'whole'",
                      after ? "trigger = 'command' DESC, sequence DESC" : "sequence DESC", after);
}

void set_health(Connection& connection, std::string const& assessment_id, Health health) {
    sorted([&] {
        pqxx::work work{connection.session()};
        work.exec_params(
            "UPDATE loadline.assessment SET health = $2 WHERE assessment_id = $1::uuid",
            assessment_id, std::string{word(health_words, health)});
        work.commit();
    });
}

Snapshot read_snapshot(Connection& connection) {
    return sorted([&] {
        pqxx::transaction<pqxx::repeatable_read, pqxx::read_only> work{connection.session()};
        Snapshot snapshot;
        snapshot.inputs = {.whole = true,
                           .counterparties = read_counterparties(work, std::nullopt),
                           .shared = read_shared(work)};
        snapshot.taken_at = time_of(view(work.exec1("SELECT transaction_timestamp()")[0]));
        for (auto const& row : work.exec(R"sql(
            SELECT assessment_id, book_digest, model_digest, as_of, plan FROM loadline.assessment
            WHERE scope = 'whole' ORDER BY sequence DESC LIMIT 1)sql"))
            snapshot.last_whole = {.assessment_id = text_of(row[0]),
                                   .book_digest = text_of(row[1]),
                                   .model_digest = text_of(row[2]),
                                   .as_of = time_of(view(row[3])),
                                   .plan = readable_plan(row[4])};
        for (auto const& row : work.exec(
                 "SELECT assessment_id FROM loadline.assessment ORDER BY sequence DESC LIMIT 1"))
            snapshot.es_contribution_of = text_of(row[0]);
        for (auto const& row :
             work.exec("SELECT counterparty_id, es_contribution FROM loadline.counterparty_risk"))
            snapshot.es_contribution.emplace(text_of(row[0]), number_of(row[1]));
        return snapshot;
    });
}

void show_times_in(Connection& connection, std::string const& time_zone) {
    sorted([&] {
        pqxx::nontransaction work{connection.session()};
        work.exec("SET TimeZone = " + work.quote(time_zone));
    });
}

Request request_assessment(Connection& connection) {
    return sorted([&] {
        pqxx::work work{connection.session()};
        Request request;
        request.last_sequence =
            work.exec1("SELECT coalesce(max(sequence), 0) FROM loadline.assessment")[0]
                .as<std::int64_t>();
        request.change_id =
            work.exec1("SELECT loadline.request_assessment()")[0].as<std::int64_t>();
        work.commit();
        return request;
    });
}

bool is_consumed(Connection& connection, Request const& request) {
    return sorted([&] {
        pqxx::nontransaction work{connection.session()};
        return !work.exec_params1("SELECT EXISTS (SELECT FROM loadline.change_log WHERE id = $1)",
                                  request.change_id)[0]
                    .as<bool>();
    });
}

namespace {

// A person's decision on the alert as it is now.
template <class... Parameters>
std::int64_t decide(Connection& connection, std::string const& call, std::int64_t alert_id,
                    Parameters const&... parameters) {
    return sorted([&] {
        pqxx::work work{connection.session()};
        auto const seen = work.exec_params(
            "SELECT row_version FROM loadline.alert WHERE alert_id = $1", alert_id);
        if (seen.empty())
            throw DatabaseError{
                Trouble::usage, "P0002",
                fmt::format("there is no alert {}: `loadline alerts` lists them", alert_id)};
        auto const version =
            work.exec_params1(call, alert_id, seen[0][0].as<std::int64_t>(), parameters...)[0]
                .template as<std::int64_t>();
        work.commit();
        return version;
    });
}

}  // namespace

std::int64_t acknowledge(Connection& connection, std::int64_t alert_id, std::string const& note,
                         model::Time due_at) {
    return decide(connection, "SELECT loadline.acknowledge($1, $2, $3, $4::timestamptz)", alert_id,
                  note, model::iso(due_at));
}

std::int64_t take_back(Connection& connection, std::int64_t alert_id, std::string const& note) {
    return decide(connection, "SELECT loadline.take_back($1, $2, $3)", alert_id, note);
}

}  // namespace process
