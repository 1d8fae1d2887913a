#include "daemon/commands.hpp"

#include "alerts/cause.hpp"
#include "daemon/calendar.hpp"
#include "daemon/digest.hpp"
#include "daemon/print.hpp"
#include "daemon/schema.hpp"
#include "daemon/service.hpp"
#include "daemon/tables.hpp"
#include "daemon/verify.hpp"
#include "daemon/watch.hpp"
#include "model/verify.hpp"

#include <CLI/CLI.hpp>
#include <fmt/format.h>
#include <nlohmann/json.hpp>
#include <spdlog/spdlog.h>

#include <algorithm>
#include <charconv>
#include <chrono>
#include <cstdlib>
#include <filesystem>
#include <functional>
#include <iostream>
#include <thread>

namespace process {
namespace {

using namespace std::chrono_literals;

constexpr int done = 0;
constexpr int failed = 1;
constexpr int misused = 2;

constexpr std::string_view caution =
    "Figures are model estimates that support a decision. They are not regulatory capital and do "
    "not replace the firm's credit policy, its approval authorities or its supervisor's rules.";

// What every command is asked with.
struct Common {
    std::string config = [] {
        auto const* const folder = std::getenv("LOADLINE_CONFIG");
        return std::string{folder != nullptr ? folder : "/etc/loadline"};
    }();
    std::string format = "table";

    [[nodiscard]] Format as() const { return *alerts::find(format_words, format); }
};

Rows fault_rows(std::vector<config::Fault> const& faults) {
    using Kind = Column::Kind;
    Rows rows{{{"file", Kind::text},
               {"line", Kind::integer},
               {"column", Kind::integer},
               {"what", Kind::text},
               {"expected", Kind::text}},
              {}};
    for (auto const& fault : faults)
        rows.rows.push_back({fault.file, std::to_string(fault.line), std::to_string(fault.column),
                             fault.what, fault.expected});
    return rows;
}

// Thrown where the configuration is at fault and everything about it has been said.
struct Misconfigured {};

template <class Value>
Value or_refuse(std::variant<Value, std::vector<config::Fault>> loaded) {
    if (auto const* const faults = std::get_if<std::vector<config::Fault>>(&loaded)) {
        for (auto const& fault : *faults) std::cerr << fault.text() << '\n';
        std::cerr << fmt::format("{} fault(s); nothing was done\n", faults->size());
        throw Misconfigured{};
    }
    return std::get<Value>(std::move(loaded));
}

config::Service service_of(Common const& common) {
    // A desk's machine may hold no files of the service: libpq's own environment is enough there.
    if (!std::filesystem::exists(std::filesystem::path{common.config} / "service.yaml")) return {};
    return or_refuse(config::load_service(common.config));
}

Connection open(Common const& common, std::string_view role, std::string_view purpose) {
    auto const service = service_of(common);
    Connection connection{service.database, purpose, role};
    show_times_in(connection, service.time_zone);
    return connection;
}

double figure(Cell const& cell) {
    double value = 0.0;
    if (cell) std::from_chars(cell->data(), cell->data() + cell->size(), value);
    return value;
}

int check_config(Common const& common) {
    auto const loaded = config::load(common.config);
    if (auto const* const faults = std::get_if<std::vector<config::Fault>>(&loaded)) {
        if (common.as() == Format::table)
            for (auto const& fault : *faults) std::cout << fault.text() << '\n';
        else
            print(std::cout, fault_rows(*faults), common.as());
        std::cerr << fmt::format("{} fault(s)\n", faults->size());
        return misused;
    }
    auto const& rules = std::get<config::Rules>(loaded);
    if (common.as() == Format::table)
        std::cout << fmt::format("good: {} limits, {} grades; limits digest {}, model digest {}\n",
                                 rules.limits->size(), rules.model->grades.size(),
                                 digest_of(rules.limits_files), digest_of(rules.model_files));
    else
        print(std::cout, fault_rows({}), common.as());
    return done;
}

int schema_apply(Common const& common, bool install, bool print_only) {
    if (install && print_only) {
        std::cout << schema_as_sql();
        return done;
    }
    auto const database = service_of(common).database;
    if (!install) {
        Connection connection{database, "schema", ""};
        if (!is_installed(connection)) {
            std::cerr << "the schema is not installed: run `loadline schema install`\n";
            return failed;
        }
        if (print_only) {
            std::cout << missing_steps_as_sql(connection);
            return done;
        }
    }
    auto const applied = apply_schema(database);
    for (auto const& name : applied) std::cout << "applied " << name << '\n';
    if (applied.empty()) std::cout << "nothing to apply: the schema is as this program needs it\n";
    return done;
}

int schema_check(Common const& common) {
    Connection connection{service_of(common).database, "schema", "loadline_reader"};
    auto const problems = schema_problems(connection);
    for (auto const& problem : problems) std::cout << problem << '\n';
    if (problems.empty()) std::cout << "good: " << schema_steps().size() << " steps, triggers on\n";
    return problems.empty() ? done : failed;
}

int assess(Common const& common, std::optional<std::int64_t> seed) {
    auto const rules = or_refuse(config::load(common.config));
    start_log("warning");
    Connection asking{rules.service.database, "assess", "loadline_engine"};
    show_times_in(asking, rules.service.time_zone);
    Watch watch{rules, common.config};
    std::optional<Request> request;
    for (int round = 0;; ++round) {
        if (request && is_consumed(asking, *request)) break;
        // The writer may end before it gets to the request: once a second, see if the lock is free.
        if (round % 10 == 0 && watch.pass_once(seed)) {
            request.reset();
            break;
        }
        if (seed) {
            std::cerr << "another process is the writer, and its own seed rules: stop it, or leave "
                         "out --seed\n";
            return misused;
        }
        if (!request) {
            request = request_assessment(asking);
            std::cerr << "another process is the writer: asked it for an assessment, waiting\n";
        }
        std::this_thread::sleep_for(100ms);
    }
    print_one(
        std::cout,
        read_assessment(asking, request ? std::optional{request->last_sequence} : std::nullopt),
        common.as());
    return done;
}

int verify(Common const& common, VerifyPlan const& plan) {
    auto const rules = or_refuse(config::load(common.config));
    Connection connection{rules.service.database, "verify", "loadline_engine"};
    auto const found = verify(connection, rules, plan,
                              [](std::string_view doing) { std::cerr << visible(doing) << '\n'; });
    print(std::cout, found.checks, common.as());
    std::cerr << (found.agrees ? "agrees; " : "differs; ") << found.note << '\n';
    return found.agrees ? done : failed;
}

int list_alerts(Common const& common, bool ended_too) {
    auto connection = open(common, "loadline_reader", "alerts");
    auto const rows = read_alerts(connection, ended_too);
    print(std::cout, rows, common.as());
    if (common.as() == Format::table) {
        auto const last = read_last_assessment(connection);
        std::cerr
            << (last.rows.empty()
                    ? "nothing has been assessed yet: run `loadline assess` or `loadline serve`\n"
                    : fmt::format("{} alerts as of {}; {} rows set aside, worth {}\n",
                                  rows.rows.size(), *last.at(0, "as_of"),
                                  *last.at(0, "rows_set_aside"),
                                  readable_figure(last.at(0, "amount_set_aside").value_or("0"))));
    }
    return done;
}

template <class Enum, std::size_t Size>
Enum word_in(std::pair<Enum, std::string_view> const (&words)[Size], Cell const& cell,
             Enum otherwise) {
    return cell ? alerts::find(words, *cell).value_or(otherwise) : otherwise;
}

alerts::Position position_of(nlohmann::json const& json) {
    alerts::Position position;
    position.observed = json.at("observed").get<double>();
    if (!json.at("level").is_null()) position.level = json.at("level").get<double>();
    return position;
}

alerts::Cause cause_of(std::string const& text) {
    auto const json = nlohmann::json::parse(text);
    alerts::Cause cause{position_of(json.at("before")), position_of(json.at("after")), {}};
    for (auto const& part : json.at("parts"))
        if (auto const known = alerts::find(alerts::part_words, part.at("part").get<std::string>()))
            cause.parts.emplace_back(*known, part.at("amount").get<double>());
    return cause;
}

std::string sentence_of(Rows const& row, alerts::Cause const& cause) {
    alerts::Alert alert;
    alert.key = {
        *row.at(0, "limit_id"),
        word_in(alerts::subject_kind_words, row.at(0, "subject_kind"), alerts::SubjectKind::name),
        *row.at(0, "subject")};
    alert.measure = word_in(alerts::measure_words, row.at(0, "measure"), alerts::Measure::exposure);
    alert.severity =
        word_in(alerts::severity_words, row.at(0, "severity"), alerts::Severity::breach);
    alert.state = word_in(alerts::state_words, row.at(0, "state"), alerts::State::open);
    alert.observed = figure(row.at(0, "observed"));
    alert.level = figure(row.at(0, "level"));
    alert.held = word_in(alerts::held_words, row.at(0, "held_reason"), model::Held::no);
    alert.end_reason = row.at(0, "end_reason").value_or("");
    std::optional<alerts::Nature> nature;
    if (row.at(0, "nature")) nature = alerts::find(alerts::nature_words, *row.at(0, "nature"));
    return sentence(alert, row.at(0, "name").value_or(""), cause, nature,
                    row.at(0, "base_currency").value_or(""));
}

Rows part_rows(alerts::Cause const& cause) {
    Rows rows{{{"part", Column::Kind::text}, {"amount", Column::Kind::figure}}, {}};
    for (auto const& [part, amount] : cause.parts)
        rows.rows.push_back(
            {std::string{word(alerts::part_words, part)}, fmt::format("{}", amount)});
    return rows;
}

// The limit as the folder's file has it; its defaults where there is no such file or limit.
alerts::Limit limit_in_file(Common const& common, std::string const& limit_id) {
    auto const loaded = config::load(common.config);
    if (auto const* const rules = std::get_if<config::Rules>(&loaded)) {
        auto const limit = std::ranges::find(*rules->limits, limit_id, &alerts::Limit::limit_id);
        if (limit != rules->limits->end()) return *limit;
    }
    return {};
}

int show_alert(Common const& common, std::int64_t alert_id) {
    auto connection = open(common, "loadline_reader", "alert");
    auto const row = read_alert(connection, alert_id);
    if (row.rows.empty()) {
        std::cerr << fmt::format("there is no alert {}: `loadline alerts --all` lists them\n",
                                 alert_id);
        return failed;
    }
    auto const events = read_alert_events(connection, alert_id);
    if (common.as() == Format::json) {
        std::pair<std::string, Rows> const inside[] = {{"events", events}};
        std::cout << json_object(row, inside) << '\n';
        return done;
    }
    if (common.as() == Format::csv) {
        print(std::cout, row, Format::csv);
        return done;
    }
    auto const cause = cause_of(*row.at(0, "cause"));
    std::cout << visible(sentence_of(row, cause)) << '\n';
    if (auto const limit = limit_in_file(common, *row.at(0, "limit_id")); !limit.act.empty())
        std::cout << "What to do: " << visible(limit.act) << '\n';
    std::cout << '\n';
    print_one(std::cout, row, Format::table);
    auto const position = [](alerts::Position const& at) {
        return fmt::format("observed {}, level {}", readable_figure(fmt::format("{}", at.observed)),
                           at.level ? readable_figure(fmt::format("{}", *at.level)) : "unknown");
    };
    std::cout << fmt::format("\ncause: from {} to {}\n", position(cause.before),
                             position(cause.after));
    print(std::cout, part_rows(cause), Format::table);
    std::cout << "\nhistory\n";
    print(std::cout, events, Format::table);
    return done;
}

std::optional<model::Day> parse_day(std::string const& text) {
    int year = 0;
    unsigned month = 0;
    unsigned day = 0;
    int read = 0;
    if (std::sscanf(text.c_str(), "%4d-%2u-%2u%n", &year, &month, &day, &read) != 3 ||
        static_cast<std::size_t>(read) != text.size() || text.size() != 10)
        return std::nullopt;
    std::chrono::year_month_day const date{std::chrono::year{year}, std::chrono::month{month},
                                           std::chrono::day{day}};
    return date.ok() ? std::optional{std::chrono::sys_days{date}} : std::nullopt;
}

int decide(Common const& common, std::int64_t alert_id, std::string const& note,
           std::string const& until, bool back) {
    auto const service = service_of(common);
    Connection connection{service.database, "acknowledge", "loadline_desk"};
    show_times_in(connection, service.time_zone);
    if (back) {
        take_back(connection, alert_id, note);
        std::cout << fmt::format("alert {} is open again\n", alert_id);
        return done;
    }
    auto const row = read_alert(connection, alert_id);
    if (row.rows.empty()) {
        std::cerr << fmt::format("there is no alert {}: `loadline alerts` lists them\n", alert_id);
        return failed;
    }
    std::optional<model::Day> last_day;
    if (until.empty()) {
        auto const now = std::chrono::time_point_cast<std::chrono::microseconds>(
            std::chrono::system_clock::now());
        last_day =
            day_of(now, service.time_zone) +
            // calendar days until business days exist
            std::chrono::days{limit_in_file(common, *row.at(0, "limit_id")).acknowledge_for_days};
    } else {
        last_day = parse_day(until);
        if (!last_day) {
            std::cerr << fmt::format("--until {}: not a day, expected YYYY-MM-DD\n", until);
            return misused;
        }
    }
    acknowledge(connection, alert_id, note,
                start_of(*last_day + std::chrono::days{1}, service.time_zone));
    std::cout << fmt::format("alert {} is acknowledged through {}; it comes back by itself\n",
                             alert_id, model::iso(*last_day));
    return done;
}

int show_risk(Common const& common, std::optional<std::string> const& counterparty_id) {
    auto connection = open(common, "loadline_reader", "risk");
    auto const rows = read_risk(connection, counterparty_id);
    if (!counterparty_id) {
        print(std::cout, rows, common.as());
        return done;
    }
    if (rows.rows.empty()) {
        std::cerr << fmt::format(
            "there is no counterparty {} in the last assessment: `loadline "
            "risk` lists them\n",
            *counterparty_id);
        return failed;
    }
    auto const facilities = read_facilities(connection, *counterparty_id);
    if (common.as() == Format::json) {
        std::pair<std::string, Rows> const inside[] = {{"facilities", facilities}};
        std::cout << json_object(rows, inside) << '\n';
    } else if (common.as() == Format::csv) {
        print(std::cout, facilities, Format::csv);
    } else {
        print_one(std::cout, rows, Format::table);
        std::cout << '\n';
        print(std::cout, facilities, Format::table);
    }
    return done;
}

int show_usage(Common const& common, std::optional<std::string> const& limit_id) {
    auto connection = open(common, "loadline_reader", "usage");
    auto const rows = read_usage(connection, limit_id);
    if (limit_id && rows.rows.empty()) {
        std::cerr << fmt::format("no usage of a limit {}: `loadline usage` lists all\n", *limit_id);
        return failed;
    }
    print(std::cout, rows, common.as());
    return done;
}

int show_set_aside(Common const& common) {
    auto connection = open(common, "loadline_reader", "set-aside");
    auto const rows = read_set_aside(connection);
    print(std::cout, rows, common.as());
    double amount = 0.0;
    for (std::size_t i = 0; i < rows.rows.size(); ++i) amount += figure(rows.at(i, "amount"));
    if (common.as() == Format::table)
        std::cerr << fmt::format("{} rows set aside, {} where the amount can be told\n",
                                 rows.rows.size(), readable_figure(fmt::format("{}", amount)));
    return done;
}

int answer(std::function<int()> const& command) {
    try {
        int const code = command();
        if (std::cout.flush()) return code;
        std::cerr << "loadline: the output could not be written\n";
    } catch (Misconfigured const&) {
        return misused;
    } catch (std::exception const& error) {
        std::cerr << "loadline: " << visible(error.what()) << '\n';
    }
    return failed;
}

}  // namespace

int run(int argc, char** argv) {
    CLI::App app{"Credit exposures, the risk on them, and the limits they are held against."};
    app.set_version_flag("--version", "loadline " LOADLINE_VERSION);
    app.require_subcommand(1);
    app.footer(std::string{caution} + "\nExample: loadline alerts --format csv");

    Common common;
    std::function<int()> command;
    auto const add = [&](CLI::App& parent, std::string const& name, std::string const& does,
                         std::string const& example) {
        auto* const sub = parent.add_subcommand(name, does);
        sub->add_option("--config", common.config,
                        "folder with service.yaml, model.yaml, limits.yaml; else LOADLINE_CONFIG, "
                        "else /etc/loadline");
        sub->add_option("--format", common.format, "table, csv or json")
            ->check(CLI::IsMember({"table", "csv", "json"}))
            ->capture_default_str();
        sub->footer("Example: " + example);
        return sub;
    };

    add(app, "serve",
        "the service: watch, assess, alert; until SIGTERM; SIGHUP reads the files again",
        "loadline serve --config /etc/loadline")
        ->callback([&] {
            command = [&] {
                auto rules = or_refuse(config::load(common.config));
                start_log(rules.service.log);
                return serve(std::move(rules), common.config);
            };
        });

    auto* const schema = app.add_subcommand("schema", "the tables, roles and triggers");
    schema->require_subcommand(1);
    schema->footer("Example: loadline schema install --print > install.sql");
    bool print_only = false;
    auto* const install =
        add(*schema, "install", "make them, or what is missing of them", "loadline schema install");
    install->add_flag("--print", print_only,
                      "print the SQL instead, for those who run it themselves");
    install->callback([&] { command = [&] { return schema_apply(common, true, print_only); }; });
    auto* const upgrade = add(*schema, "upgrade", "apply the steps an installed schema lacks",
                              "loadline schema upgrade");
    upgrade->add_flag("--print", print_only,
                      "print the SQL instead, for those who run it themselves");
    upgrade->callback([&] { command = [&] { return schema_apply(common, false, print_only); }; });
    add(*schema, "check",
        "what keeps this program from working on the database; exit 1 if anything",
        "loadline schema check")
        ->callback([&] { command = [&] { return schema_check(common); }; });

    std::optional<std::int64_t> seed;
    auto* const pass = add(app, "assess", "one pass over the whole book, then exit",
                           "loadline assess --format json");
    pass->add_option("--seed", seed, "of the simulation's random numbers, instead of model.yaml's")
        ->check(CLI::NonNegativeNumber);
    pass->callback([&] { command = [&] { return assess(common, seed); }; });

    VerifyPlan verify_plan;
    auto* const verifying =
        add(app, "verify",
            fmt::format("the engine against an independent simulation of the current book: exit 1 "
                        "where they differ, which right figures do in {} of runs",
                        model::false_alarms),
            "loadline verify --scenarios 4000000");
    verifying
        ->add_option("--scenarios", verify_plan.scenarios,
                     "instead of model.yaml's: four times as many find differences half as large")
        ->check(CLI::Range(std::uint64_t{1'000}, std::uint64_t{1'000'000'000}));
    verifying
        ->add_option("--seed", verify_plan.seed,
                     "of the simulation's random numbers, instead of model.yaml's")
        ->check(CLI::NonNegativeNumber);
    verifying->callback([&] { command = [&] { return verify(common, verify_plan); }; });

    add(app, "check-config",
        "every mistake of the folder, with file, line and column; exit 2 if any",
        "loadline check-config --config ./config")
        ->callback([&] { command = [&] { return check_config(common); }; });

    bool ended_too = false;
    auto* const alerts =
        add(app, "alerts", "the desk's list, worst first", "loadline alerts --all");
    alerts->add_flag("--all", ended_too, "cured and withdrawn ones too");
    alerts->callback([&] { command = [&] { return list_alerts(common, ended_too); }; });

    std::int64_t alert_id = 0;
    auto* const alert =
        add(app, "alert", "one alert with its cause and history", "loadline alert 12");
    alert->add_option("ID", alert_id, "the alert's number")->required();
    alert->callback([&] { command = [&] { return show_alert(common, alert_id); }; });

    std::string note;
    std::string until;
    bool back = false;
    auto* const take_up =
        add(app, "acknowledge", "take up an open alert, or take that back",
            "loadline acknowledge 12 --note \"repaid on Friday\" --until 2026-12-04");
    take_up->add_option("ID", alert_id, "the alert's number")->required();
    take_up->add_option("--note", note, "what was decided and why")->required();
    auto* const last_day = take_up->add_option(
        "--until", until, "the last day it holds, YYYY-MM-DD; else the limit's own");
    take_up->add_flag("--take-back", back, "make it open again")->excludes(last_day);
    take_up->callback(
        [&] { command = [&] { return decide(common, alert_id, note, until, back); }; });

    std::optional<std::string> counterparty_id;
    auto* const risk =
        add(app, "risk", "each counterparty's measures, or one down to its facilities",
            "loadline risk C0042");
    risk->add_option("COUNTERPARTY", counterparty_id, "a counterparty_id");
    risk->callback([&] { command = [&] { return show_risk(common, counterparty_id); }; });

    std::optional<std::string> limit_id;
    auto* const usage = add(app, "usage", "every limit's use by every subject",
                            "loadline usage --limit single-name --format csv");
    usage->add_option("--limit", limit_id, "of one limit only");
    usage->callback([&] { command = [&] { return show_usage(common, limit_id); }; });

    add(app, "set-aside", "input rows that could not be used, and why", "loadline set-aside")
        ->callback([&] { command = [&] { return show_set_aside(common); }; });

    try {
        app.parse(argc, argv);
    } catch (CLI::ParseError const& error) {
        return app.exit(error) == 0 ? done : misused;
    }
    return answer(command);
}

}  // namespace process
