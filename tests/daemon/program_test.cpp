#include "tests/support/program.hpp"

#include "tests/support/database.hpp"

#include <gmock/gmock.h>
#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include <csignal>
#include <cstdlib>
#include <filesystem>

// The real program beside a real server: what is committed, and what the desk then sees.

namespace tests {
namespace {

using namespace std::chrono_literals;
using nlohmann::json;
using testing::HasSubstr;

constexpr auto limits = R"(
defaults: {warning_at: none, cure_margin: 5%, owner: desk, acknowledge_for: 5 days}
limits:
  - {id: single, per: name, measure: exposure, breach_at: EUR 50 m, act: Tell somebody.}
  - id: by-grade
    per: name
    measure: exposure
    breach_at: {by: grade, G1: EUR 60 m, G2: EUR 45 m, G3: EUR 30 m, G4: EUR 18 m, others: EUR 9 m}
  - {id: sector, per: sector, measure: exposure, breach_at: EUR 100 m}
  - {id: tail, per: sector, measure: es_contribution, breach_at: 90% of portfolio}
)";

// Ten companies of EUR 10 m, one of 25 m and one in dollars; all inside their limits.
constexpr auto book = R"sql(
    INSERT INTO loadline.counterparty (counterparty_id, legal_name, sector, country)
    SELECT 'C' || n, 'Company ' || n, CASE WHEN n % 2 = 0 THEN 'MANUF' ELSE 'RETAIL' END, 'AT' FROM generate_series(1, 12) AS n;
    INSERT INTO loadline.rating (counterparty_id, rated_at, grade)
    SELECT 'C' || n, now() - interval '30 days', CASE WHEN n = 11 THEN 'G3' ELSE 'G4' END FROM generate_series(1, 12) AS n;
    INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn)
    SELECT 'F' || n, 'C' || n, 'term_loan', CASE WHEN n = 12 THEN 'USD' ELSE 'EUR' END,
           CASE WHEN n = 11 THEN 25000000 ELSE 10000000 END
    FROM generate_series(1, 12) AS n;
    INSERT INTO loadline.fx_rate VALUES ('USD', current_date, 0.9);
    INSERT INTO loadline.capital VALUES ('tier1', current_date, 400000000);
)sql";

class Program : public testing::Test {
protected:
    Program()
        : environment{"PGDATABASE=" + database.name(),
                      "LOADLINE_CONFIG=" + config.path().string()} {
        copy_shipped_configuration(config);
        config.write("limits.yaml", limits);
        database.exec(book);
    }

    Ran loadline(std::vector<std::string> const& arguments) const {
        return run_loadline(arguments, environment);
    }
    // A command's JSON; fails the test where it does not end well.
    json result(std::vector<std::string> arguments) const {
        arguments.insert(arguments.end(), {"--format", "json"});
        auto const ran = loadline(arguments);
        EXPECT_EQ(ran.code, 0) << ran.err;
        return json::parse(ran.out, nullptr, false);
    }
    json assess() const { return result({"assess"}); }

    std::string count(std::string const& what) {
        return database.value("SELECT count(*) FROM loadline." + what);
    }
    bool alert_becomes(std::string const& what) {
        return becomes_true([&] { return count("alert WHERE " + what) == "1"; });
    }
    // The daemon has seen everything committed so far.
    bool settles() {
        return becomes_true([&] { return count("change_log") == "0"; });
    }

    Database database;
    Folder config;
    std::vector<std::string> environment;
};

TEST_F(Program, AssessWritesFiguresThatAddUp) {
    auto const done = assess();
    EXPECT_EQ(done.at("names"), 12);
    EXPECT_EQ(database.value(R"sql(
        SELECT count(*) FROM loadline.counterparty_risk AS r
        WHERE r.exposure_at_default <> (SELECT sum(f.exposure_at_default) FROM loadline.facility_exposure AS f WHERE f.counterparty_id = r.counterparty_id))sql"),
              "0");
    auto const total = [&](std::string const& column) {
        return std::stod(
            database.value("SELECT sum(" + column + ") FROM loadline.counterparty_risk"));
    };
    double const shortfall = done.at("expected_shortfall");
    EXPECT_GT(shortfall, 0.0);
    EXPECT_NEAR(total("es_contribution"), shortfall, 1e-6 * shortfall);
    double const credit_var = done.at("credit_var");
    EXPECT_NEAR(total("var_contribution"), credit_var, 1e-6 * std::abs(credit_var));
    EXPECT_NEAR(total("expected_loss"), done.at("expected_loss").get<double>(), 1e-6);
}

TEST_F(Program, ASecondPassOnAnUnchangedBookWritesNoAlertAndNoEvent) {
    database.exec("UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    assess();
    EXPECT_EQ(count("alert"), "1");
    EXPECT_EQ(count("alert_event"), "1");
    auto const risk = database.query("SELECT * FROM loadline.counterparty_risk ORDER BY 1");
    assess();
    EXPECT_EQ(count("alert"), "1");
    EXPECT_EQ(count("alert_event"), "1");
    // Only rows that moved are written: the first pass still owns them all.
    EXPECT_EQ(database.query("SELECT * FROM loadline.counterparty_risk ORDER BY 1"), risk);
    EXPECT_EQ(database.value("SELECT cause -> 'parts' -> 0 ->> 'part' FROM loadline.alert"),
              "found_at_start");
}

// Another seed may open what is over its level; it moves nothing else, and what it opens is true.
TEST_F(Program, OtherSeedsOnlyOpenWhatIsOverItsLevel) {
    database.exec("UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    assess();
    for (int seed = 2; seed < 12; ++seed) result({"assess", "--seed", std::to_string(seed)});
    EXPECT_EQ(count("alert_event WHERE kind <> 'opened'"), "0");
    assess();
    EXPECT_EQ(database.value("SELECT count(*) FROM loadline.alert LEFT JOIN loadline.limit_usage "
                             "USING (limit_id, subject_kind, subject) "
                             "WHERE standing IS DISTINCT FROM 'breach'"),
              "0");
}

TEST_F(Program, ACommittedDowngradeIsAnAlertWithItsCause) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("assessment") == "1"; })) << served.log();
    EXPECT_EQ(count("alert"), "0");
    auto const committed = std::chrono::steady_clock::now();
    database.exec(
        "INSERT INTO loadline.rating (counterparty_id, rated_at, grade) VALUES ('C11', now(), "
        "'G4')");
    ASSERT_TRUE(alert_becomes("subject = 'C11' AND state = 'open'")) << served.log();
    EXPECT_LT(std::chrono::steady_clock::now() - committed, 5s);

    auto const id = database.value("SELECT alert_id FROM loadline.alert");
    auto const alert = result({"alert", id});
    EXPECT_EQ(alert.at("limit_id"), "by-grade");
    EXPECT_EQ(alert.at("nature"), "passive");
    EXPECT_EQ(alert.at("cause").at("parts"),
              json::parse(R"([{"part": "rating", "amount": 12000000.0}])"));
    EXPECT_EQ(alert.at("events").at(0).at("kind"), "opened");
    EXPECT_THAT(
        loadline({"alert", id}).out,
        HasSubstr(
            "Exposure of name C11 (Company 11) is EUR 25.0 m, against the breach level EUR 18.0 m "
            "of by-grade; since before: rating +EUR 12.0 m; not by an act of our own (passive)."));

    // The same again, as the feeds do it, changes nothing.
    database.exec(
        "INSERT INTO loadline.rating (counterparty_id, rated_at, grade) SELECT counterparty_id, "
        "rated_at, grade FROM loadline.rating "
        "ON CONFLICT (counterparty_id, source, rated_at) DO UPDATE SET grade = excluded.grade");
    database.exec("UPDATE loadline.exposure SET drawn = drawn");
    ASSERT_TRUE(settles());
    EXPECT_EQ(count("alert_event"), "1");

    // And the way back is a cure.
    database.exec("UPDATE loadline.exposure SET drawn = 17000000 WHERE exposure_id = 'F11'");
    ASSERT_TRUE(alert_becomes("state = 'cured' AND end_reason = 'exposure' AND nature = 'passive'"))
        << served.log();
}

TEST_F(Program, ARestartKnowsItsAlerts) {
    database.exec("UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    for (int start = 0; start < 2; ++start) {
        Served served{config.path(), environment};
        ASSERT_TRUE(becomes_true([&] { return count("assessment") == std::to_string(start + 1); }))
            << served.log();
        served.signal(SIGTERM);
        EXPECT_EQ(served.wait(20s), 0) << served.log();
    }
    EXPECT_EQ(count("alert"), "1");
    EXPECT_EQ(count("alert_event"), "1");
}

TEST_F(Program, ABadRowIsSetAsideHeldAndStopsNobodyElse) {
    database.exec(
        "UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id IN ('F1', 'F2')");
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("alert") == "2"; })) << served.log();
    database.exec(
        "UPDATE loadline.exposure SET drawn = 1, loss_given_default = 1.7 WHERE exposure_id = 'F1';"
        "UPDATE loadline.exposure SET drawn = 1 WHERE exposure_id = 'F2'");
    ASSERT_TRUE(alert_becomes("subject = 'C2' AND state = 'cured'")) << served.log();
    EXPECT_EQ(
        count("alert WHERE subject = 'C1' AND state = 'open' AND held_reason = 'row_set_aside'"),
        "1");
    auto const aside = result({"set-aside"});
    ASSERT_EQ(aside.size(), 1U);
    EXPECT_EQ(aside.at(0).at("source_key"), "F1");
    EXPECT_EQ(aside.at(0).at("reason"), "loss_given_default is not in [0, 1]");
    database.exec("UPDATE loadline.exposure SET loss_given_default = 0.4 WHERE exposure_id = 'F1'");
    ASSERT_TRUE(alert_becomes("subject = 'C1' AND state = 'cured'")) << served.log();
    EXPECT_EQ(count("set_aside WHERE until IS NULL"), "0");
}

TEST_F(Program, WithoutRatingOrRateNothingIsCalmer) {
    database.exec(
        "UPDATE loadline.exposure SET drawn = 30000000 WHERE exposure_id IN ('F1', 'F12')");
    assess();
    auto const exposure =
        database.value("SELECT sum(exposure_at_default) FROM loadline.counterparty_risk");
    EXPECT_EQ(count("alert WHERE state = 'open'"), "2");
    database.exec("DELETE FROM loadline.rating WHERE counterparty_id = 'C1'");
    assess();
    EXPECT_EQ(database.value("SELECT sum(exposure_at_default) FROM loadline.counterparty_risk"),
              exposure);
    EXPECT_EQ(
        database.value("SELECT flags FROM loadline.counterparty_risk WHERE counterparty_id = 'C1'"),
        "{unrated}");
    database.exec(
        "DELETE FROM loadline.fx_rate; DELETE FROM loadline.exposure WHERE exposure_id = 'F1'");
    assess();
    EXPECT_EQ(
        database.value("SELECT string_agg(subject, ' ') FROM loadline.alert WHERE state = 'cured'"),
        "C1");
    EXPECT_EQ(
        count("alert WHERE subject = 'C12' AND state = 'open' AND held_reason = 'rate_missing'"),
        "1");
    EXPECT_EQ(database.value("SELECT held_reason FROM loadline.limit_usage WHERE limit_id = "
                             "'single' AND subject = 'C12'"),
              "rate_missing");
}

// A feed that drops counterparties before their exposures must not cure anything.
TEST_F(Program, ACounterpartyLostWithItsExposureStillThereEndsNoAlert) {
    database.exec(
        "UPDATE loadline.exposure SET drawn = 60000000 WHERE exposure_id IN ('F1', 'F3')");
    assess();
    EXPECT_EQ(count("alert WHERE limit_id = 'sector' AND state = 'open'"), "1");
    database.exec("DELETE FROM loadline.counterparty WHERE sector = 'RETAIL'");
    assess();
    EXPECT_EQ(count("alert WHERE state <> 'open'"), "0");
    EXPECT_EQ(count("alert WHERE state = 'open' AND limit_id IN ('sector', 'single', 'by-grade') "
                    "AND held_reason IS NULL"),
              "0");
    EXPECT_EQ(database.value(
                  "SELECT sum(amount) >= 170000000 FROM loadline.set_aside WHERE until IS NULL"),
              "t");
}

TEST_F(Program, ABadFileLeavesTheOldOneRuling) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("assessment") == "1"; })) << served.log();
    auto const ruling = database.value(
        "SELECT digest FROM loadline.config_version WHERE kind = 'limits' AND ruled_to IS NULL");
    config.write(
        "limits.yaml",
        std::string{limits} + "  - {id: more, per: name, mesure: exposure, breach_at: EUR 1 m}\n");
    served.signal(SIGHUP);
    ASSERT_TRUE(becomes_true(
        [&] { return served.log().find("event=config_refused") != std::string::npos; }));
    EXPECT_THAT(served.log(), HasSubstr("limits.yaml:11:"));
    database.exec("UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    ASSERT_TRUE(alert_becomes("subject = 'C1' AND limit_id = 'by-grade'")) << served.log();
    EXPECT_EQ(database.value(
                  "SELECT limits_digest FROM loadline.assessment ORDER BY sequence DESC LIMIT 1"),
              ruling);

    auto raised = std::string{limits};
    raised.replace(raised.find("G4: EUR 18 m"), 12, "G4: EUR 28 m");
    config.write("limits.yaml", raised);
    served.signal(SIGHUP);
    ASSERT_TRUE(
        alert_becomes("subject = 'C1' AND state = 'withdrawn' AND end_reason = 'level_raised'"))
        << served.log();
    EXPECT_EQ(count("config_version WHERE kind = 'limits'"), "2");
}

TEST_F(Program, AssessBesideServeAsksAndWaits) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("assessment") == "1"; })) << served.log();
    auto const done = assess();
    EXPECT_EQ(done.at("trigger"), "command");
    EXPECT_EQ(done.at("scope"), "whole");
    EXPECT_EQ(done.at("sequence"), 2);
    EXPECT_EQ(count("change_log"), "0");
    EXPECT_EQ(loadline({"assess", "--seed", "9"}).code, 2);
}

TEST_F(Program, ALostSessionIsReplacedAndNothingIsLost) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("assessment") == "1"; })) << served.log();
    database.exec(
        "SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE application_name LIKE "
        "'loadline %' AND datname = current_database();"
        "UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    ASSERT_TRUE(alert_becomes("subject = 'C1'")) << served.log();
    EXPECT_EQ(count("alert_event"), "1");
}

// libpqxx gives no SQLSTATE with it, and the service ended.
TEST_F(Program, ARightTakenAwayIsWaitedOut) {
    Served served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("assessment") == "1"; })) << served.log();
    database.exec(
        "REVOKE SELECT ON loadline.rating FROM loadline_engine;"
        "UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    ASSERT_TRUE(becomes_true([&] {
        return served.log().find("sqlstate=42501") != std::string::npos;
    })) << served.log();
    database.exec("GRANT SELECT ON loadline.rating TO loadline_engine");
    EXPECT_TRUE(alert_becomes("subject = 'C1'")) << served.log();
}

// A feed's empty text is nothing: it joined every facility without a netting set into one.
TEST_F(Program, AnEmptyTextIsNothing) {
    database.exec(
        "INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn, "
        "collateral, netting_set) "
        "VALUES ('N1', 'C1', 'term_loan', 'EUR', 40000000, 0, ''), ('N2', 'C1', 'term_loan', "
        "'EUR', 1000000, 40000000, '');"
        "UPDATE loadline.counterparty SET country_of_risk = '' WHERE counterparty_id = 'C1'");
    assess();
    EXPECT_EQ(database.value("SELECT exposure_at_default FROM loadline.counterparty_risk WHERE "
                             "counterparty_id = 'C1'"),
              "50000000.000");
}

TEST_F(Program, ADecisionThatMeetsATurnCostsNoCause) {
    database.exec("UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("alert") == "1"; })) << served.log();
    // The desk's transaction holds the alert's row while the turn wants to write it.
    pqxx::connection desk{database.dsn()};
    pqxx::work decision{desk};
    decision.exec(
        "SELECT loadline.acknowledge(alert_id, row_version, 'seen', now() + interval '1 day') FROM "
        "loadline.alert");
    database.exec(
        "UPDATE loadline.exposure SET drawn = 30000000 WHERE exposure_id IN ('F1', 'F2')");
    ASSERT_TRUE(becomes_true([&] {
        return served.log().find("event=turn_retried") != std::string::npos ||
               database.value("SELECT count(*) FROM pg_locks WHERE NOT granted") != "0";
    }));
    decision.commit();
    ASSERT_TRUE(alert_becomes("subject = 'C2'")) << served.log();
    EXPECT_EQ(
        database.value(
            "SELECT cause -> 'parts' -> 0 ->> 'part' FROM loadline.alert WHERE subject = 'C2'"),
        "exposure");
    EXPECT_EQ(count("alert_event WHERE kind = 'worse'"), "1");
}

TEST_F(Program, AnAcknowledgementRestsAndComesBack) {
    database.exec("UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1'");
    assess();
    auto const id = database.value("SELECT alert_id FROM loadline.alert");
    EXPECT_EQ(loadline({"acknowledge", id}).code, 2) << "a note is asked for";
    auto const taken = loadline({"acknowledge", id, "--note", "repaid on Friday"});
    EXPECT_EQ(taken.code, 0) << taken.err;
    EXPECT_EQ(count("alert WHERE state = 'acknowledged' AND due_at > now() + interval '5 days'"),
              "1");
    EXPECT_EQ(loadline({"acknowledge", id, "--note", "again"}).code, 1);
    assess();
    EXPECT_EQ(count("alert_event"), "2");
    EXPECT_EQ(loadline({"acknowledge", id, "--note", "too early", "--take-back"}).code, 0);
    EXPECT_EQ(count("alert WHERE state = 'open' AND due_at IS NULL"), "1");

    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("assessment") == "3"; })) << served.log();
    database.exec(
        "SELECT loadline.acknowledge(" + id +
        ", row_version, 'for a second', now() + interval '1 second') FROM loadline.alert");
    ASSERT_TRUE(becomes_true([&] { return count("alert_event WHERE kind = 'due'") == "1"; }))
        << served.log();
    EXPECT_EQ(count("alert WHERE state = 'open'"), "1");
}

TEST_F(Program, ALoginThatIsNoMemberIsToldTheOneGrant) {
    auto const login = "stranger_" + database.name();
    database.exec("CREATE ROLE " + login + " LOGIN");
    auto as_stranger = environment;
    as_stranger.insert(as_stranger.begin(), "PGUSER=" + login);
    auto const ran = run_loadline({"alerts"}, as_stranger);
    EXPECT_EQ(ran.code, 1);
    EXPECT_THAT(
        ran.err,
        HasSubstr(login + " is not a member of loadline_reader: ask for GRANT loadline_reader TO"));
    database.exec("DROP ROLE " + login);
}

TEST_F(Program, SchemaInstallIsSafeToRepeatAndRefusesANewerDatabase) {
    EXPECT_THAT(loadline({"schema", "install"}).out, HasSubstr("nothing to apply"));
    EXPECT_EQ(loadline({"schema", "check"}).code, 0);
    database.exec("ALTER TABLE loadline.rating DISABLE TRIGGER log_insert");
    auto const check = loadline({"schema", "check"});
    EXPECT_EQ(check.code, 1);
    EXPECT_THAT(check.out, HasSubstr("trigger log_insert of loadline.rating"));
    database.exec(
        "INSERT INTO loadline.schema_step (number, name, checksum) VALUES (99, 'from_tomorrow', "
        "'x')");
    auto const refused = loadline({"schema", "upgrade"});
    EXPECT_EQ(refused.code, 1);
    EXPECT_THAT(refused.err, HasSubstr("use the program that goes with the database"));
    EXPECT_EQ(loadline({"assess"}).code, 1);
}

TEST_F(Program, EveryCommandHasHelpWithAnExample) {
    for (auto const* const command : {"serve", "assess", "check-config", "alerts", "alert",
                                      "acknowledge", "risk", "usage", "set-aside", "schema"}) {
        auto const ran = loadline({command, "--help"});
        EXPECT_EQ(ran.code, 0) << command;
        EXPECT_THAT(ran.out, HasSubstr("Example: loadline")) << command;
    }
    EXPECT_EQ(loadline({}).code, 2);
    EXPECT_EQ(loadline({"alert"}).code, 2);
    EXPECT_EQ(loadline({"alerts", "--format", "xml"}).code, 2);
}

TEST_F(Program, ResultsComeInThreeFormats) {
    database.exec(
        "UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1';"
        "UPDATE loadline.counterparty SET legal_name = '=1+1,\"x\"' WHERE counterparty_id = 'C1'");
    assess();
    EXPECT_THAT(loadline({"alerts"}).out, HasSubstr("20.0 m"));
    EXPECT_THAT(loadline({"alerts", "--format", "csv"}).out,
                HasSubstr(",\"'=1+1,\"\"x\"\"\",exposure,20000000,18000000,"));
    auto const alerts = result({"alerts"});
    EXPECT_EQ(alerts.at(0).at("observed"), 20000000);
    EXPECT_TRUE(alerts.at(0).at("due_at").is_null());
    auto const risk = result({"risk", "C1"});
    EXPECT_EQ(risk.at("facilities").size(), 1U);
    EXPECT_EQ(result({"usage", "--limit", "single"}).size(), 12U);
    EXPECT_EQ(loadline({"risk", "C99"}).code, 1);
}

TEST_F(Program, CheckConfigNamesEveryMistake) {
    auto const good = loadline({"check-config"});
    EXPECT_EQ(good.code, 0);
    EXPECT_THAT(good.out, testing::StartsWith("good: 4 limits"));
    config.write("limits.yaml",
                 std::string{limits} + "  - {id: more, per: name, mesure: exposure}\n");
    config.write("service.yaml", "poll: 010 ms\n");
    auto const bad = loadline({"check-config"});
    EXPECT_EQ(bad.code, 2);
    EXPECT_THAT(bad.out, HasSubstr("service.yaml:1:7: "));
    EXPECT_THAT(bad.out, HasSubstr("limits.yaml:11:"));
    EXPECT_EQ(loadline({"serve"}).code, 2);
    // What is asked for goes before the environment.
    auto const shipped = std::string{LOADLINE_SOURCE} + "/config";
    EXPECT_EQ(loadline({"check-config", "--config", shipped}).code, 0);
    EXPECT_EQ(loadline({"assess", "--config", "/nowhere"}).code, 2);
}

TEST_F(Program, AResultThatCannotBeWrittenIsNoSuccess) {
    auto const command = std::string{LOADLINE_BINARY} + " check-config --config " +
                         LOADLINE_SOURCE + "/config >/dev/full 2>/dev/null";
    EXPECT_EQ(WEXITSTATUS(std::system(command.c_str())), 1);
}

TEST_F(Program, TheTerminalAndTheLogShowControlCharacters) {
    database.exec(
        "UPDATE loadline.exposure SET drawn = 20000000 WHERE exposure_id = 'F1';"
        "UPDATE loadline.counterparty SET legal_name = E'A\\nlevel=error \\x1b[31m' WHERE "
        "counterparty_id = 'C1'");
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("alert") == "1"; })) << served.log();
    EXPECT_THAT(loadline({"alert", database.value("SELECT alert_id FROM loadline.alert")}).out,
                HasSubstr("(A\\x0Alevel=error \\x1B[31m)"));
    EXPECT_THAT(served.log(), testing::Not(HasSubstr("\x1b")));
}

}  // namespace
}  // namespace tests
