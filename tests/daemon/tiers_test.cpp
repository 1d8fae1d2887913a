#include "tests/support/database.hpp"
#include "tests/support/program.hpp"

#include <fmt/format.h>
#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <csignal>
#include <filesystem>
#include <thread>

// A change is served in two tiers: what changed names have by themselves at once, what depends on
// the whole book after it.

namespace tests {
namespace {

using namespace std::chrono_literals;
using testing::HasSubstr;
using testing::Not;

constexpr auto limits = R"(
defaults: {warning_at: none, cure_margin: 5%, owner: desk, acknowledge_for: 5 days}
limits:
  - {id: single, per: name, measure: exposure, breach_at: EUR 50 m}
  - {id: sector, per: sector, measure: exposure, breach_at: 80% of portfolio}
  - {id: tail, per: name, measure: es_contribution, breach_at: 20% of portfolio}
)";

// Twelve companies of EUR 10 m over two sectors; all inside their limits.
constexpr auto book = R"sql(
    INSERT INTO loadline.counterparty (counterparty_id, legal_name, sector, country)
    SELECT 'C' || n, 'Company ' || n, CASE WHEN n % 2 = 0 THEN 'MANUF' ELSE 'RETAIL' END, 'AT' FROM generate_series(1, 12) AS n;
    INSERT INTO loadline.rating (counterparty_id, rated_at, grade)
    SELECT 'C' || n, now() - interval '30 days', 'G4' FROM generate_series(1, 12) AS n;
    INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn)
    SELECT 'F' || n, 'C' || n, 'term_loan', 'EUR', 10000000 FROM generate_series(1, 12) AS n;
)sql";

class Tiers : public testing::Test {
protected:
    Tiers()
        : environment{"PGDATABASE=" + database.name(),
                      "LOADLINE_CONFIG=" + config.path().string()} {
        copy_shipped_configuration(config);
        config.write("limits.yaml", limits);
        database.exec(book);
    }

    void change_model(std::string const& from, std::string const& to) const {
        auto model = config.read("model.yaml");
        model.replace(model.find(from), from.size(), to);
        config.write("model.yaml", model);
    }
    void draw(std::string const& exposure_id, int millions) {
        database.exec(
            fmt::format("UPDATE loadline.exposure SET drawn = {}000000 WHERE exposure_id = '{}'",
                        millions, exposure_id));
    }

    std::string count(std::string const& what) {
        return database.value("SELECT count(*) FROM loadline." + what);
    }
    // The scopes of all assessments, in order.
    std::string scopes() {
        return database.value(
            "SELECT string_agg(scope, ' ' ORDER BY sequence) FROM loadline.assessment");
    }
    bool has_started() {
        return becomes_true([&] { return count("assessment") == "1"; });
    }
    // Everything committed so far has been assessed whole.
    bool settles() {
        return becomes_true([&] {
            return database.value(R"sql(
                SELECT NOT EXISTS (SELECT FROM loadline.change_log) AND
                       (SELECT scope = 'whole' FROM loadline.assessment ORDER BY sequence DESC LIMIT 1))sql") ==
                   "t";
        });
    }
    bool contributions_add_up() {
        return database.value(R"sql(
            SELECT abs(sum(r.es_contribution) / max(a.expected_shortfall) - 1) < 1e-6 AND count(*) = count(r.es_contribution)
                AND count(*) = max(a.names)
            FROM loadline.counterparty_risk AS r,
                 (SELECT * FROM loadline.assessment ORDER BY sequence DESC LIMIT 1) AS a)sql") ==
               "t";
    }

    // While it lives no whole turn can end: it holds a row that they all write.
    class NoWholeTurn {
    public:
        explicit NoWholeTurn(Database const& database) : session_{database.dsn()}, lock_{session_} {
            lock_.exec(
                "SELECT FROM loadline.counterparty_risk WHERE counterparty_id = 'C2' FOR UPDATE");
        }

    private:
        pqxx::connection session_;
        pqxx::work lock_;
    };

    Database database;
    Folder config;
    std::vector<std::string> environment;
};

TEST_F(Tiers, AChangeIsServedTouchedAndThenWhole) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(has_started()) << served.log();
    draw("F1", 60);
    ASSERT_TRUE(settles()) << served.log();
    EXPECT_EQ(scopes(), "whole touched whole");
    EXPECT_EQ(database.value("SELECT count(*) FROM loadline.assessment WHERE scope = 'touched' AND "
                             "trigger = 'change' AND engine = 'closed form' AND plan IS NULL AND "
                             "loss_quantile IS NULL"),
              "1");
    // What is a sum of the names' own is the same in both, the rest only the whole one knows.
    EXPECT_EQ(database.value("SELECT count(DISTINCT (round(expected_loss::numeric, 3), names, "
                             "book_digest)) FROM loadline.assessment WHERE sequence > 1"),
              "1");
    EXPECT_TRUE(contributions_add_up());
    EXPECT_EQ(database.query(R"sql(
                  SELECT a.limit_id, a.subject, s.scope FROM loadline.alert AS a
                  JOIN loadline.assessment AS s ON s.assessment_id = a.opened_by_assessment ORDER BY 1)sql"),
              (std::vector<std::vector<std::string>>{{"single", "C1", "touched"},
                                                     {"tail", "C1", "whole"}}));
    EXPECT_EQ(count("limit_usage JOIN loadline.assessment USING (assessment_id) "
                    "WHERE limit_id = 'tail' AND scope <> 'whole'"),
              "0");
}

TEST_F(Tiers, ATouchedTurnWritesTheSubjectsItTouchesAndNoContribution) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(has_started()) << served.log();
    auto const tail = [&] {
        return database.query(
            "SELECT * FROM loadline.limit_usage WHERE limit_id = 'tail' ORDER BY subject");
    };
    auto const tail_before = tail();
    {
        NoWholeTurn const held{database};
        database.exec(R"sql(
            UPDATE loadline.exposure SET drawn = 60000000 WHERE exposure_id = 'F1';
            INSERT INTO loadline.counterparty (counterparty_id, legal_name, sector, country) VALUES ('C13', 'New', 'AGRI', 'AT');
            INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn) VALUES ('F13', 'C13', 'term_loan', 'EUR', 70000000))sql");
        ASSERT_TRUE(becomes_true([&] { return count("alert") == "2"; })) << served.log();
        EXPECT_THAT(scopes(), Not(HasSubstr("touched whole")));
        EXPECT_EQ(count("counterparty_risk WHERE counterparty_id = 'C13' AND exposure_at_default = "
                        "70000000 AND var_contribution IS NULL AND es_contribution IS NULL"),
                  "1");
        EXPECT_EQ(count("counterparty_risk JOIN loadline.assessment USING (assessment_id) "
                        "WHERE scope = 'touched'"),
                  "2");
        EXPECT_EQ(count("facility_exposure JOIN loadline.assessment USING (assessment_id) "
                        "WHERE scope = 'touched'"),
                  "2");
        EXPECT_EQ(count("limit_usage JOIN loadline.assessment USING (assessment_id) "
                        "WHERE scope = 'touched' AND limit_id = 'single'"),
                  "2");
        // A share of the portfolio moves for sectors that nothing touched.
        EXPECT_EQ(count("limit_usage JOIN loadline.assessment USING (assessment_id) "
                        "WHERE scope = 'touched' AND limit_id = 'sector' AND subject = 'MANUF'"),
                  "1");
        EXPECT_EQ(tail(), tail_before);
        EXPECT_EQ(
            database.value("SELECT cause -> 'parts' FROM loadline.alert WHERE subject = 'C1'"),
            R"([{"part": "exposure", "amount": 50000000.0}])");
    }
    ASSERT_TRUE(settles()) << served.log();
    EXPECT_TRUE(contributions_add_up());
    EXPECT_EQ(count("limit_usage WHERE limit_id = 'tail'"), "13");
}

// Its cause leads from the last whole figures over every touched turn between.
TEST_F(Tiers, AContributionIsExplainedSinceTheLastWholeTurn) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(has_started()) << served.log();
    {
        NoWholeTurn const held{database};
        draw("F1", 30);
        draw("F1", 60);
        ASSERT_TRUE(becomes_true([&] { return count("alert WHERE limit_id = 'single'") == "1"; }))
            << served.log();
    }
    ASSERT_TRUE(settles()) << served.log();
    EXPECT_EQ(database.value(R"sql(
        SELECT count(*) FROM loadline.alert AS a, LATERAL (
            SELECT sum((p ->> 'amount')::double precision) AS parts FROM jsonb_array_elements(a.cause -> 'parts') AS p) AS s
        WHERE a.limit_id = 'tail' AND a.subject = 'C1'
            AND abs(s.parts - ((a.cause #>> '{after,observed}')::double precision - (a.cause #>> '{after,level}')::double precision)
                            + ((a.cause #>> '{before,observed}')::double precision - (a.cause #>> '{before,level}')::double precision)) < 1
            AND (a.cause #>> '{before,observed}')::double precision <
                0.2 * (a.cause #>> '{after,observed}')::double precision)sql"),
              "1");
}

TEST_F(Tiers, AnAcknowledgedContributionComesBackByAWholeTurn) {
    draw("F1", 60);
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("alert WHERE limit_id = 'tail'") == "1"; }))
        << served.log();
    database.exec(
        "SELECT loadline.acknowledge(alert_id, row_version, 'for a second', now() + interval '1 "
        "second') FROM loadline.alert WHERE limit_id = 'tail'");
    draw("F2", 11);
    ASSERT_TRUE(becomes_true([&] { return count("alert_event WHERE kind = 'due'") == "1"; }))
        << served.log();
    EXPECT_EQ(database.value("SELECT scope || ' ' || trigger FROM loadline.alert_event JOIN "
                             "loadline.assessment USING (assessment_id) WHERE kind = 'due'"),
              "whole time");
}

TEST_F(Tiers, ARestartGoesOnWithThePlan) {
    {
        Served served{config.path(), environment};
        ASSERT_TRUE(has_started()) << served.log();
        served.signal(SIGTERM);
        ASSERT_EQ(served.wait(20s), 0) << served.log();
    }
    // A trace that no figure depends on shows where a plan comes from.
    database.exec(
        "UPDATE loadline.assessment SET plan = jsonb_set(plan, '{effective_share}', '0.015625')");
    auto const risk = database.query("SELECT * FROM loadline.counterparty_risk ORDER BY 1");
    {
        Served served{config.path(), environment};
        ASSERT_TRUE(becomes_true([&] { return count("assessment") == "2"; })) << served.log();
        EXPECT_EQ(database.value("SELECT count(DISTINCT (plan, loss_quantile, expected_shortfall)) "
                                 "FROM loadline.assessment"),
                  "1");
        EXPECT_EQ(database.query("SELECT * FROM loadline.counterparty_risk ORDER BY 1"), risk);
        EXPECT_EQ(count("alert_event"), "0");
        served.signal(SIGTERM);
        ASSERT_EQ(served.wait(20s), 0) << served.log();
    }
    // Another seed and another model have plans of their own, and the first finds its own again.
    auto const newest = [&] {
        return database.value(
            "SELECT plan ->> 'effective_share' = '0.015625' FROM loadline.assessment ORDER BY "
            "sequence DESC LIMIT 1");
    };
    EXPECT_EQ(run_loadline({"assess", "--seed", "9"}, environment).code, 0);
    EXPECT_EQ(newest(), "f");
    change_model("confidence: 0.999", "confidence: 0.99");
    EXPECT_EQ(run_loadline({"assess"}, environment).code, 0);
    EXPECT_EQ(newest(), "f");
    change_model("confidence: 0.99", "confidence: 0.999");
    EXPECT_EQ(run_loadline({"assess"}, environment).code, 0);
    EXPECT_EQ(newest(), "t");
}

TEST_F(Tiers, APlanThatCannotBeReadIsIgnored) {
    EXPECT_EQ(run_loadline({"assess"}, environment).code, 0);
    database.exec(
        R"sql(UPDATE loadline.assessment SET plan = '{"seed": 1, "inversion": "by hand"}')sql");
    Served const served{config.path(), environment};
    ASSERT_TRUE(becomes_true([&] { return count("assessment") == "2"; })) << served.log();
    EXPECT_THAT(served.log(), HasSubstr("event=plan_ignored"));
    EXPECT_EQ(count("assessment WHERE plan ->> 'inversion' <> 'by hand'"), "1");
}

TEST_F(Tiers, AWholeTurnIsPutOffButNotForLong) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(has_started()) << served.log();
    // Changes come without a pause until two more whole turns have been served between them.
    auto const whole = [&] { return std::stoi(count("assessment WHERE scope = 'whole'")); };
    for (auto const end = std::chrono::steady_clock::now() + 90s;
         whole() < 3 && std::chrono::steady_clock::now() < end; std::this_thread::sleep_for(10ms))
        database.exec("UPDATE loadline.exposure SET drawn = drawn + 1 WHERE exposure_id = 'F1'");
    EXPECT_GE(whole(), 3) << scopes();
    EXPECT_GT(std::stoi(count("assessment WHERE scope = 'touched'")), 3 * whole()) << scopes();
}

TEST_F(Tiers, ABurstEndsInOneTruth) {
    Served const served{config.path(), environment};
    ASSERT_TRUE(has_started()) << served.log();
    for (int n = 1; n <= 60; ++n) draw(fmt::format("F{}", 1 + n % 12), n);
    ASSERT_TRUE(settles()) << served.log();
    EXPECT_LT(std::stoi(count("assessment WHERE scope = 'whole'")), 30);
    EXPECT_EQ(database.value(R"sql(
        SELECT count(*) FROM loadline.counterparty_risk AS r
        JOIN loadline.exposure AS e USING (counterparty_id) WHERE e.drawn <> r.exposure_at_default)sql"),
              "0");
    EXPECT_TRUE(contributions_add_up());
    auto const usage = database.query(
        "SELECT limit_id, subject_kind, subject, observed, breach_level, standing FROM "
        "loadline.limit_usage WHERE limit_id <> 'tail' ORDER BY 1, 2, 3");
    EXPECT_EQ(run_loadline({"assess"}, environment).code, 0);
    EXPECT_EQ(database.query("SELECT limit_id, subject_kind, subject, observed, breach_level, "
                             "standing FROM loadline.limit_usage WHERE limit_id <> 'tail' ORDER BY "
                             "1, 2, 3"),
              usage);
}

TEST_F(Tiers, AProcessKilledBetweenThemLosesNothing) {
    {
        Served served{config.path(), environment};
        ASSERT_TRUE(has_started()) << served.log();
        NoWholeTurn const held{database};
        draw("F1", 60);
        ASSERT_TRUE(becomes_true([&] { return count("alert") == "1"; })) << served.log();
        served.signal(SIGKILL);
        served.wait(5s);
    }
    EXPECT_EQ(scopes(), "whole touched");
    EXPECT_EQ(count("change_log"), "0");
    Served const served{config.path(), environment};
    ASSERT_TRUE(settles()) << served.log();
    EXPECT_EQ(
        database.value("SELECT trigger FROM loadline.assessment ORDER BY sequence DESC LIMIT 1"),
        "start");
    EXPECT_TRUE(contributions_add_up());
    EXPECT_EQ(count("alert_event WHERE kind = 'opened'"), "2");
    EXPECT_EQ(count("alert WHERE limit_id = 'tail' AND subject = 'C1'"), "1");
}

TEST_F(Tiers, ARateReadsEverythingAndIsServedWhole) {
    database.exec(
        "INSERT INTO loadline.fx_rate VALUES ('USD', current_date, 1);"
        "UPDATE loadline.exposure SET currency = 'USD' WHERE exposure_id IN ('F1', 'F2')");
    Served const served{config.path(), environment};
    ASSERT_TRUE(has_started()) << served.log();
    database.exec("UPDATE loadline.fx_rate SET base_per_unit = 6");
    ASSERT_TRUE(becomes_true([&] { return count("alert WHERE limit_id = 'single'") == "2"; }))
        << served.log();
    EXPECT_EQ(scopes(), "whole whole");
}

}  // namespace
}  // namespace tests
