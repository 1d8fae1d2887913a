#include "daemon/schema.hpp"
#include "tests/support/database.hpp"

#include <fmt/format.h>
#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <algorithm>
#include <cctype>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <utility>

namespace {

using testing::HasSubstr;
using tests::Database;

// Rows as lines, fields parted by a space.
std::string lines(std::vector<std::vector<std::string>> const& rows) {
    std::string text;
    for (auto const& row : rows) text += fmt::format("{}\n", fmt::join(row, " "));
    return text;
}

// The server's reason to refuse a statement; empty where it does not.
std::string refusal(Database& database, std::string_view sql) {
    try {
        database.exec(sql);
        return "";
    } catch (pqxx::sql_error const& e) {
        return e.what();
    }
}

// The steps ---------------------------------------------------------------------------------------

TEST(SchemaSteps, TravelInTheProgramByteForByteAndInOrder) {
    std::vector<std::filesystem::path> files;
    for (auto const& entry : std::filesystem::directory_iterator{LOADLINE_SOURCE "/sql"})
        if (std::isdigit(static_cast<unsigned char>(entry.path().filename().string()[0])) != 0)
            files.push_back(entry.path());
    std::ranges::sort(files);
    auto const steps = process::schema_steps();
    ASSERT_EQ(steps.size(), files.size());
    for (std::size_t i = 0; i < steps.size(); ++i) {
        std::ifstream file{files[i], std::ios::binary};
        std::string const text{std::istreambuf_iterator<char>{file}, {}};
        EXPECT_EQ(steps[i].number, static_cast<int>(i) + 1);
        EXPECT_EQ(fmt::format("{:03}_{}.sql", steps[i].number, steps[i].name),
                  files[i].filename().string());
        EXPECT_EQ(steps[i].text, text);
    }
}

TEST(Schema, HasTheColumnsOfTheContract) {
    Database database;
    // ! not null; = has a default
    EXPECT_EQ(lines(database.query(R"(
        SELECT format(E'%s\n  %s', c.table_name, string_agg(
            c.column_name || ' ' || CASE c.data_type WHEN 'double precision' THEN 'double'
                                                     WHEN 'timestamp with time zone' THEN 'timestamptz'
                                                     WHEN 'ARRAY' THEN 'text[]'
                                                     ELSE c.data_type END
            || CASE c.is_nullable WHEN 'NO' THEN '!' ELSE '' END
            || CASE WHEN c.column_default IS NULL THEN '' ELSE '=' END
            || CASE c.is_identity WHEN 'YES' THEN ' identity' ELSE '' END,
            ', ' ORDER BY c.ordinal_position))
        FROM information_schema.columns AS c WHERE c.table_schema = 'loadline'
        GROUP BY c.table_name ORDER BY c.table_name COLLATE "C")")),
              R"(alert
  alert_id bigint! identity, limit_id text!, subject_kind text!, subject text!, measure text!, severity text!, state text!, due_at timestamptz, nature text, episode integer!, observed numeric!, level numeric!, worst_observed numeric!, held_reason text, opened_at timestamptz!, opened_by_assessment uuid!, changed_at timestamptz!, changed_by_assessment uuid!, ended_at timestamptz, end_reason text, cause jsonb!, wave text, owner text, row_version bigint!=
alert_event
  event_id bigint! identity, alert_id bigint!, at timestamptz!, actor text!, assessment_id uuid, decision_id text, kind text!, from_state text!, to_state text!, severity text!, observed numeric!, level numeric!, note text
assessment
  assessment_id uuid!, sequence bigint! identity, scope text!, trigger text!, as_of timestamptz!, started_at timestamptz!, finished_at timestamptz!, seconds double!, program_version text!, engine text!, health text!=, base_currency text!, names integer!, book_digest text!, limits_digest text!, model_digest text!, confidence double!, horizon_years double!, expected_loss double!, defaulted_loss double!, loss_quantile double, credit_var double, expected_shortfall double, loss_quantile_error double, credit_var_error double, expected_shortfall_error double, plan jsonb
capital
  kind text!, as_of date!, amount numeric!
change_log
  id bigint! identity, xid xid8!=, src smallint!, op character!, key text, at timestamptz!=
config_version
  kind text!, digest text!, files jsonb!, loaded_at timestamptz!, loaded_by text!, ruled_from timestamptz, ruled_to timestamptz
connected_group
  group_id text!, name text!
counterparty
  counterparty_id text!, legal_name text!, segment text!=, sector text, country text, country_of_risk text, lei text, asset_correlation double, watch_since date, watch_reason text
counterparty_risk
  counterparty_id text!, assessment_id uuid!, grade text!, flags text[]!=, exposure_at_default numeric!, default_probability double!, downgrade_probability double!, expected_loss double!, standalone_loss_deviation double!, var_contribution double, var_contribution_error double, es_contribution double, es_contribution_error double
exposure
  exposure_id text!, counterparty_id text!, product text!, currency text!, drawn numeric!, undrawn numeric!=, conversion_factor double, committed boolean!=, add_on numeric!=, collateral numeric!=, netting_set text, collateral_pool text, loss_given_default double, maturity date, booked_at timestamptz, large_exposure_value numeric
facility_exposure
  exposure_id text!, counterparty_id text!, exposure_at_default numeric!, rate_used double!, flags text[]!=, assessment_id uuid!
fx_rate
  currency text!, quoted_on date!, base_per_unit numeric!
group_member
  group_id text!, counterparty_id text!, tie text!, valid_from date!, valid_until date
limit_usage
  limit_id text!, subject_kind text!, subject text!, assessment_id uuid!, measure text!, unit text!, observed numeric!, observed_error double!, warning_level numeric, breach_level numeric, headroom numeric, standing text, held_reason text, breach_probability_quarter double, breach_probability_year double
rating
  counterparty_id text!, source text!=, rated_at timestamptz!, grade text!, outlook text, recorded_at timestamptz!=
schema_step
  number integer!, name text!, checksum text!, applied_at timestamptz!=, applied_by text!=
set_aside
  source_table text!, source_key text!, reason text!, amount numeric, since timestamptz!, until timestamptz
subject_name
  subject_kind text, subject text, name text
)");
}

TEST(Schema, HasTheKeysOfTheContract) {
    Database database;
    EXPECT_EQ(lines(database.query(R"(
        SELECT conrelid::regclass, pg_get_constraintdef(oid) FROM pg_constraint
        WHERE connamespace = 'loadline'::regnamespace AND contype = 'p'
        ORDER BY conrelid::regclass::text COLLATE "C")")),
              "loadline.alert PRIMARY KEY (alert_id)\n"
              "loadline.alert_event PRIMARY KEY (event_id)\n"
              "loadline.assessment PRIMARY KEY (assessment_id)\n"
              "loadline.capital PRIMARY KEY (kind, as_of)\n"
              "loadline.change_log PRIMARY KEY (id)\n"
              "loadline.config_version PRIMARY KEY (kind, digest)\n"
              "loadline.connected_group PRIMARY KEY (group_id)\n"
              "loadline.counterparty PRIMARY KEY (counterparty_id)\n"
              "loadline.counterparty_risk PRIMARY KEY (counterparty_id)\n"
              "loadline.exposure PRIMARY KEY (exposure_id)\n"
              "loadline.facility_exposure PRIMARY KEY (exposure_id)\n"
              "loadline.fx_rate PRIMARY KEY (currency, quoted_on)\n"
              "loadline.group_member PRIMARY KEY (group_id, counterparty_id, valid_from)\n"
              "loadline.limit_usage PRIMARY KEY (limit_id, subject_kind, subject)\n"
              "loadline.rating PRIMARY KEY (counterparty_id, source, rated_at)\n"
              "loadline.schema_step PRIMARY KEY (number)\n"
              "loadline.set_aside PRIMARY KEY (source_table, source_key, reason, since)\n");
}

TEST(Schema, SaysWhatEveryTableColumnAndFunctionMeans) {
    Database database;
    EXPECT_EQ(lines(database.query(R"(
        SELECT c.relname FROM pg_class AS c
        WHERE c.relnamespace = 'loadline'::regnamespace AND c.relkind IN ('r', 'v')
            AND coalesce(obj_description(c.oid, 'pg_class'), '') = ''
        UNION ALL
        SELECT c.relname || '.' || a.attname FROM pg_class AS c JOIN pg_attribute AS a ON a.attrelid = c.oid
        WHERE c.relnamespace = 'loadline'::regnamespace AND c.relkind IN ('r', 'v')
            AND a.attnum > 0 AND NOT a.attisdropped AND coalesce(col_description(c.oid, a.attnum), '') = ''
        UNION ALL
        SELECT p.proname FROM pg_proc AS p
        WHERE p.pronamespace = 'loadline'::regnamespace AND coalesce(obj_description(p.oid, 'pg_proc'), '') = '')")),
              "");
}

TEST(Schema, BelongsToItsOwnerAlone) {
    Database database;
    EXPECT_EQ(lines(database.query(R"(
        SELECT relname FROM pg_class
        WHERE relnamespace = 'loadline'::regnamespace AND relowner <> 'loadline_owner'::regrole
        UNION ALL
        SELECT proname FROM pg_proc
        WHERE pronamespace = 'loadline'::regnamespace AND proowner <> 'loadline_owner'::regrole)")),
              "");
}

// Inputs ------------------------------------------------------------------------------------------

TEST(Inputs, TakeInWhatIsWrongButMustBeShown) {
    Database database;
    database.exec(R"(
        INSERT INTO loadline.counterparty (counterparty_id, legal_name, sector, country, lei, asset_correlation)
        VALUES ('C1', '', 'STEEL,COAL', 'Atlantis', 'not a lei', 1.5), ('', 'no id', NULL, NULL, NULL, 'NaN');
        INSERT INTO loadline.group_member VALUES ('no group', 'nobody', 'control', '2020-01-01', '2019-01-01');
        INSERT INTO loadline.rating (counterparty_id, rated_at, grade) VALUES ('nobody', 'infinity', 'Z9');
        INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn, undrawn, conversion_factor, add_on, collateral, loss_given_default)
        VALUES ('F1', 'C1', 'loan', 'EUR', 'NaN', -5, -1, 'Infinity', -1, 1.7), ('F2', 'nobody', '', 'XXX', -1, 0, 'NaN', -1, 0, 'Infinity');
        INSERT INTO loadline.fx_rate VALUES ('USD', '2020-01-01', 0), ('CHF', '2020-01-01', 'NaN');
        INSERT INTO loadline.capital VALUES ('tier1', '2020-01-01', -1), ('own_funds', '2020-01-01', 'NaN');)");
    EXPECT_EQ(database.value("SELECT count(*) FROM loadline.exposure"), "2");
}

TEST(Inputs, RefuseWhatCanNeverBeRight) {
    Database database;
    for (auto const* const statement : {
             "INSERT INTO loadline.counterparty (counterparty_id, legal_name, segment) VALUES "
             "('C1', 'A', 'retail')",
             "INSERT INTO loadline.counterparty (counterparty_id, legal_name) VALUES (NULL, 'A')",
             "INSERT INTO loadline.counterparty (counterparty_id, legal_name) VALUES ('C1', 'A'), "
             "('C1', 'B')",
             "INSERT INTO loadline.group_member VALUES ('G1', 'C1', 'family', '2020-01-01')",
             "INSERT INTO loadline.rating (counterparty_id, rated_at, grade) VALUES ('C1', now(), "
             "NULL)",
             "INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, "
             "drawn) VALUES ('F1', 'C1', 'loan', NULL, 1)",
             "INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, "
             "drawn) VALUES ('F1', 'C1', 'loan', 'EUR', NULL)",
             "INSERT INTO loadline.capital VALUES ('tier2', '2020-01-01', 1)",
         })
        EXPECT_NE(refusal(database, statement), "") << statement;
}

TEST(Inputs, TakeAMembershipThatBeganTwiceOnDifferentDays) {
    Database database;
    database.exec(R"(
        INSERT INTO loadline.group_member VALUES
            ('G1', 'C1', 'control', '2020-01-01', '2020-12-31'),
            ('G1', 'C1', 'economic', '2022-01-01', NULL))");
    EXPECT_NE(
        refusal(database,
                "INSERT INTO loadline.group_member VALUES ('G1', 'C1', 'economic', '2022-01-01')"),
        "");
}

// The change log ----------------------------------------------------------------------------------

// What a statement leaves in change_log: source, operation and key, in that order of sorting.
std::string left_by(Database& database, std::string_view statement) {
    database.exec("DELETE FROM loadline.change_log");
    database.exec(statement);
    return lines(
        database.query("SELECT src, op, key FROM loadline.change_log ORDER BY src, op, key"));
}

// Two facilities of C1, one of C2.
constexpr auto three_facilities = R"(
    INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn)
    VALUES ('F1', 'C1', 'loan', 'EUR', 10), ('F2', 'C1', 'loan', 'EUR', 20), ('F3', 'C2', 'loan', 'EUR', 30))";

TEST(ChangeLog, HasEachCounterpartyOfAnInsertOnce) {
    Database database;
    EXPECT_EQ(left_by(database, three_facilities), "5 I C1\n5 I C2\n");
}

TEST(ChangeLog, HasBothOwnersOfAFacilityThatMoves) {
    Database database;
    database.exec(three_facilities);
    EXPECT_EQ(
        left_by(database, "UPDATE loadline.exposure SET counterparty_id = 'C9' WHERE drawn < 25"),
        "5 U C1\n5 U C9\n");
}

TEST(ChangeLog, HasAnUpdateThatChangesNothing) {
    Database database;
    database.exec(three_facilities);
    EXPECT_EQ(
        left_by(database, "UPDATE loadline.exposure SET drawn = drawn WHERE exposure_id = 'F3'"),
        "5 U C2\n");
}

TEST(ChangeLog, HasWhatAnUpsertDid) {
    Database database;
    database.exec(three_facilities);
    auto const upsert = [](std::string_view rows) {
        return fmt::format(R"(
            INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn) VALUES {}
            ON CONFLICT (exposure_id) DO UPDATE SET drawn = EXCLUDED.drawn)",
                           rows);
    };
    EXPECT_EQ(left_by(database, upsert("('F1', 'C1', 'loan', 'EUR', 11)")), "5 U C1\n");
    EXPECT_EQ(left_by(database,
                      upsert("('F3', 'C2', 'loan', 'EUR', 31), ('F4', 'C4', 'loan', 'EUR', 41)")),
              "5 I C4\n5 U C2\n");
}

TEST(ChangeLog, HasWhatAMergeDid) {
    Database database;
    database.exec(three_facilities);
    EXPECT_EQ(left_by(database, R"(
        MERGE INTO loadline.exposure AS e
        USING (VALUES ('F1', 'C1'), ('F3', 'C2'), ('F4', 'C4')) AS s (exposure_id, counterparty_id)
            ON e.exposure_id = s.exposure_id
        WHEN MATCHED AND s.exposure_id = 'F3' THEN DELETE
        WHEN MATCHED THEN UPDATE SET drawn = 0
        WHEN NOT MATCHED THEN INSERT (exposure_id, counterparty_id, product, currency, drawn)
            VALUES (s.exposure_id, s.counterparty_id, 'loan', 'EUR', 1))"),
              "5 D C2\n5 I C4\n5 U C1\n");
}

TEST(ChangeLog, HasDeletedRowsAndATruncatedTable) {
    Database database;
    database.exec(three_facilities);
    EXPECT_EQ(left_by(database, "DELETE FROM loadline.exposure WHERE exposure_id IN ('F1', 'F2')"),
              "5 D C1\n");
    EXPECT_EQ(left_by(database, "TRUNCATE loadline.exposure"), "5 T ∅\n");
}

TEST(ChangeLog, HasNothingOfAStatementThatTouchesNoRow) {
    Database database;
    for (std::string const table : {"counterparty", "connected_group", "group_member", "rating",
                                    "exposure", "fx_rate", "capital"}) {
        EXPECT_EQ(left_by(database, fmt::format("DELETE FROM loadline.{}", table)), "");
        EXPECT_EQ(
            left_by(database,
                    fmt::format("INSERT INTO loadline.{0} SELECT * FROM loadline.{0}", table)),
            "");
    }
    EXPECT_EQ(left_by(database, "UPDATE loadline.exposure SET drawn = 0"), "");
    EXPECT_EQ(left_by(database, "UPDATE loadline.fx_rate SET base_per_unit = 0"), "");
}

TEST(ChangeLog, HasNothingOfATransactionThatIsRolledBack) {
    Database database;
    EXPECT_EQ(left_by(database, fmt::format("BEGIN; {}; ROLLBACK", three_facilities)), "");
}

TEST(ChangeLog, KnowsEachInputByItsNumberAndSharedOnesAsAWhole) {
    Database database;
    auto const all_of_it = [&](std::string_view table, std::string_view row,
                               std::string_view column) {
        auto left = left_by(database, fmt::format("INSERT INTO loadline.{} {}", table, row));
        left += left_by(database, fmt::format("UPDATE loadline.{0} SET {1} = {1}", table, column));
        left += left_by(database, fmt::format("DELETE FROM loadline.{}", table));
        return left + left_by(database, fmt::format("TRUNCATE loadline.{}", table));
    };
    EXPECT_EQ(all_of_it("connected_group", "VALUES ('G1', 'A'), ('G2', 'B')", "name"),
              "2 I ∅\n2 U ∅\n2 D ∅\n2 T ∅\n");
    EXPECT_EQ(all_of_it("group_member", "VALUES ('G1', 'C1', 'control', '2020-01-01')", "tie"),
              "3 I C1\n3 U C1\n3 D C1\n3 T ∅\n");
    EXPECT_EQ(
        all_of_it("rating", "(counterparty_id, rated_at, grade) VALUES ('C1', '2020-01-01', 'G1')",
                  "grade"),
        "4 I C1\n4 U C1\n4 D C1\n4 T ∅\n");
    EXPECT_EQ(all_of_it("exposure",
                        "(exposure_id, counterparty_id, product, currency, drawn) VALUES ('F1', "
                        "'C1', 'loan', 'EUR', 1)",
                        "drawn"),
              "5 I C1\n5 U C1\n5 D C1\n5 T ∅\n");
    EXPECT_EQ(all_of_it("fx_rate", "VALUES ('USD', '2020-01-01', 0.9), ('CHF', '2020-01-01', 1)",
                        "base_per_unit"),
              "6 I ∅\n6 U ∅\n6 D ∅\n6 T ∅\n");
    EXPECT_EQ(all_of_it("capital", "VALUES ('tier1', '2020-01-01', 1)", "amount"),
              "7 I ∅\n7 U ∅\n7 D ∅\n7 T ∅\n");
}

TEST(ChangeLog, NamesFiftyThousandKeysAndBeyondThemTheTable) {
    Database database;
    auto const insert = [](int first, int last) {
        return fmt::format(
            "INSERT INTO loadline.counterparty (counterparty_id, legal_name) SELECT 'C' || i, '' "
            "FROM generate_series({}, {}) AS i",
            first, last);
    };
    database.exec(insert(1, 50'000));
    EXPECT_EQ(database.value("SELECT count(DISTINCT key) FROM loadline.change_log"), "50000");
    EXPECT_EQ(left_by(database, insert(50'001, 100'001)), "1 I ∅\n");
    EXPECT_EQ(left_by(database, "UPDATE loadline.counterparty SET sector = 'A'"), "1 U ∅\n");
    // Each key counts once, but before and after: 25,001 owners that change hands are 50,002.
    EXPECT_EQ(left_by(database,
                      "UPDATE loadline.counterparty SET counterparty_id = 'D' || counterparty_id "
                      "WHERE substr(counterparty_id, 2)::integer <= 25001"),
              "1 U ∅\n");
    EXPECT_EQ(left_by(database, "DELETE FROM loadline.counterparty"), "1 D ∅\n");
}

TEST(ChangeLog, HasWhatAReplicaWrites) {
    Database database;
    database.exec("SET session_replication_role = replica");
    EXPECT_EQ(left_by(database, three_facilities), "5 I C1\n5 I C2\n");
    EXPECT_EQ(left_by(database, "TRUNCATE loadline.exposure"), "5 T ∅\n");
    EXPECT_EQ(lines(database.query(R"(
        SELECT tgrelid::regclass, tgname FROM pg_trigger AS t JOIN pg_class AS c ON c.oid = t.tgrelid
        WHERE c.relnamespace = 'loadline'::regnamespace AND NOT t.tgisinternal AND t.tgenabled <> 'A')")),
              "");
}

TEST(ChangeLog, HasWhatAWriterWithoutRightsOnItWrites) {
    Database database;
    database.exec("SET ROLE loadline_loader");
    EXPECT_THAT(refusal(database, "SELECT FROM loadline.change_log"),
                HasSubstr("permission denied"));
    EXPECT_THAT(refusal(database, "INSERT INTO loadline.change_log (src, op) VALUES (0, 'R')"),
                HasSubstr("permission denied"));
    database.exec(three_facilities);
    database.exec("RESET ROLE");
    EXPECT_EQ(lines(database.query("SELECT src, op, key FROM loadline.change_log ORDER BY key")),
              "5 I C1\n5 I C2\n");
}

TEST(ChangeLog, FailsTheWriterRatherThanMissAChange) {
    Database database;
    database.exec("ALTER TABLE loadline.change_log ADD CHECK (false)");
    EXPECT_NE(refusal(database, three_facilities), "");
    EXPECT_EQ(database.value("SELECT count(*) FROM loadline.exposure"), "0");
}

TEST(RequestAssessment, ReturnsTheRowThatAsks) {
    Database database;
    database.exec("SET ROLE loadline_engine");
    auto const id = database.value("SELECT loadline.request_assessment()");
    EXPECT_EQ(lines(database.query("SELECT id, src, op, key FROM loadline.change_log")),
              id + " 0 R ∅\n");
}

// The hint ----------------------------------------------------------------------------------------

// A session that counts the hints it hears.
class Listener : pqxx::notification_receiver {
public:
    explicit Listener(pqxx::connection& session)
        : notification_receiver{session, "loadline_change"}, session_{session} {}
    void operator()(std::string const& payload, int /*backend*/) override {
        EXPECT_EQ(payload, "");
        ++heard_;
    }
    // Everything sent before the call is heard: the server hands it over before it answers the
    // second statement.
    int heard() {
        for (int i = 0; i < 2; ++i) pqxx::nontransaction{session_}.exec("SELECT");
        session_.get_notifs();
        return std::exchange(heard_, 0);
    }

private:
    pqxx::connection& session_;
    int heard_ = 0;
};

TEST(Hint, WakesTheListenerOnceACommit) {
    Database database;
    pqxx::connection session{database.dsn()};
    Listener listener{session};
    EXPECT_EQ(listener.heard(), 0);
    database.exec(three_facilities);
    EXPECT_EQ(listener.heard(), 1);
    database.exec(
        "BEGIN; UPDATE loadline.exposure SET drawn = 0; DELETE FROM loadline.exposure; COMMIT");
    EXPECT_EQ(listener.heard(), 1);
    database.exec("DELETE FROM loadline.exposure");
    EXPECT_EQ(listener.heard(), 0);
    database.exec("SELECT loadline.request_assessment()");
    EXPECT_EQ(listener.heard(), 1);
}

TEST(Hint, IsGivenByOneOpenTransactionAlone) {
    Database database;
    database.exec(three_facilities);
    pqxx::connection session{database.dsn()};
    Listener listener{session};
    database.exec("BEGIN; UPDATE loadline.exposure SET drawn = 1 WHERE exposure_id = 'F1'");
    pqxx::connection other{database.dsn()};
    pqxx::nontransaction{other}.exec(
        "UPDATE loadline.exposure SET drawn = 2 WHERE exposure_id = 'F3'");
    EXPECT_EQ(listener.heard(), 0);
    database.exec("COMMIT");
    EXPECT_EQ(listener.heard(), 1);
    pqxx::nontransaction{other}.exec(
        "UPDATE loadline.exposure SET drawn = 3 WHERE exposure_id = 'F3'");
    EXPECT_EQ(listener.heard(), 1);
}

TEST(Hint, CanBeDroppedAloneAndTheLogStays) {
    Database database;
    database.exec("DROP TRIGGER change_hint ON loadline.change_log");
    pqxx::connection session{database.dsn()};
    Listener listener{session};
    EXPECT_EQ(left_by(database, three_facilities), "5 I C1\n5 I C2\n");
    EXPECT_EQ(listener.heard(), 0);
}

// Alerts ------------------------------------------------------------------------------------------

// An alert at row version 3; returns its number.
std::string alert(Database& database, std::string_view state, std::string_view subject = "C1") {
    bool const ended = state == "cured" || state == "withdrawn";
    return database.value(fmt::format(R"(
        INSERT INTO loadline.alert (
            limit_id, subject_kind, subject, measure, severity, state, due_at, episode, observed, level, worst_observed, opened_at,
            opened_by_assessment, changed_at, changed_by_assessment, ended_at, end_reason, cause, row_version)
        SELECT 'single-name', 'name', '{1}', 'exposure', 'breach', '{0}', {2}, 1, 110.5, 100, 120, '2026-01-01', a, '2026-01-02', a, {3}, '{{}}', 3
        FROM gen_random_uuid() AS a RETURNING alert_id)",
                                      state, subject,
                                      state == "acknowledged" ? "now() + interval '1 day'" : "NULL",
                                      ended ? "now(), 'exposure'" : "NULL, NULL"));
}

std::string acknowledge(std::string_view alert_id, int row_version,
                        std::string_view note = "'called them'",
                        std::string_view due_at = "now() + interval '5 days'") {
    return fmt::format("SELECT loadline.acknowledge({}, {}, {}, {})", alert_id, row_version, note,
                       due_at);
}

std::string take_back(std::string_view alert_id, int row_version,
                      std::string_view note = "'too early'") {
    return fmt::format("SELECT loadline.take_back({}, {}, {})", alert_id, row_version, note);
}

TEST(Acknowledge, TakesUpAnOpenAlertAndRecordsWhoAndWhy) {
    Database database;
    auto const id = alert(database, "open");
    database.exec("SET SESSION AUTHORIZATION loadline_desk");
    EXPECT_EQ(database.value(acknowledge(id, 3, "'called them'", "'2999-01-01 00:00+00'")), "4");
    EXPECT_EQ(
        lines(database.query("SELECT state, severity, due_at = '2999-01-01 00:00+00', row_version, "
                             "changed_at > now() - interval '1 minute' FROM loadline.alert")),
        "acknowledged breach t 4 t\n");
    EXPECT_EQ(
        lines(database.query(R"(
        SELECT e.alert_id, e.actor, e.assessment_id, e.kind, e.from_state, e.to_state, e.severity, e.observed, e.level, e.note, e.at = a.changed_at
        FROM loadline.alert_event AS e JOIN loadline.alert AS a USING (alert_id))")),
        id + " loadline_desk ∅ acknowledged open acknowledged breach 110.5 100 called them t\n");
}

TEST(TakeBack, OpensAnAcknowledgedAlertAgain) {
    Database database;
    auto const id = alert(database, "open");
    database.exec(acknowledge(id, 3));
    database.exec("SET SESSION AUTHORIZATION loadline_desk");
    EXPECT_EQ(database.value(take_back(id, 4)), "5");
    EXPECT_EQ(lines(database.query("SELECT state, due_at, row_version FROM loadline.alert")),
              "open ∅ 5\n");
    EXPECT_EQ(lines(database.query("SELECT actor, kind, from_state, to_state, note FROM "
                                   "loadline.alert_event ORDER BY event_id OFFSET 1")),
              "loadline_desk taken_back acknowledged open too early\n");
}

TEST(Decisions, AreRefusedInEveryOtherStateWithTheReason) {
    Database database;
    for (std::string const state : {"open", "acknowledged", "waived", "cured", "withdrawn"}) {
        auto const id = alert(database, state, state);
        if (state != "open") {
            EXPECT_THAT(
                refusal(database, acknowledge(id, 3)),
                HasSubstr(fmt::format(
                    "alert {} is {}, nothing to acknowledge: only an alert that is open can be", id,
                    state)));
        }
        if (state != "acknowledged") {
            EXPECT_THAT(refusal(database, take_back(id, 3)),
                        HasSubstr(fmt::format("alert {} is {}, nothing to take back: only an alert "
                                              "that is acknowledged can be",
                                              id, state)));
        }
    }
    EXPECT_EQ(database.value("SELECT count(*) FROM loadline.alert_event"), "0");
}

TEST(Decisions, AreRefusedOnWhatHasChangedSinceItWasRead) {
    Database database;
    auto const open = alert(database, "open", "C1");
    auto const acknowledged = alert(database, "acknowledged", "C2");
    EXPECT_THAT(
        refusal(database, acknowledge(open, 2)),
        HasSubstr(fmt::format(
            "alert {} has changed since you read it (row version 2, now 3): read it again", open)));
    EXPECT_THAT(refusal(database, acknowledge(open, 4)), HasSubstr("read it again"));
    EXPECT_THAT(refusal(database, take_back(acknowledged, 2)), HasSubstr("read it again"));
    EXPECT_THAT(
        refusal(database, fmt::format("SELECT loadline.take_back({}, NULL, 'x')", acknowledged)),
        HasSubstr("read it again"));
    EXPECT_THAT(refusal(database, acknowledge("4711", 1)), HasSubstr("there is no alert 4711"));
}

TEST(Decisions, NeedANoteAndAnEnd) {
    Database database;
    auto const id = alert(database, "open");
    for (auto const* const note : {"NULL", "''", "E' \\t\\n'"})
        EXPECT_THAT(refusal(database, acknowledge(id, 3, note)), HasSubstr("the note is empty"));
    for (auto const* const due_at :
         {"NULL", "now() - interval '1 second'", "'infinity'", "'-infinity'"})
        EXPECT_THAT(refusal(database, acknowledge(id, 3, "'called them'", due_at)),
                    HasSubstr("in the future"));
    database.exec(acknowledge(id, 3));
    EXPECT_THAT(refusal(database, take_back(id, 4, "' '")), HasSubstr("the note is empty"));
}

TEST(Decisions, MadeDuringATurnMakeTheTurnStartAgain) {
    Database database;
    auto const id = alert(database, "open");
    pqxx::connection engine{database.dsn()};
    pqxx::transaction<pqxx::repeatable_read> turn{engine};
    turn.exec("SELECT FROM loadline.alert");
    database.exec(acknowledge(id, 3));
    EXPECT_THROW(turn.exec("UPDATE loadline.alert SET observed = 130"),
                 pqxx::serialization_failure);
}

TEST(AlertRow, StaysEnded) {
    Database database;
    for (auto const& [ended, other] : {std::pair{"cured", "withdrawn"}, {"withdrawn", "cured"}}) {
        auto const id = alert(database, ended, ended);
        EXPECT_THAT(
            refusal(database,
                    fmt::format("UPDATE loadline.alert SET state = 'open', ended_at = NULL, "
                                "end_reason = NULL, row_version = 4 WHERE alert_id = {}",
                                id)),
            HasSubstr("which is final"));
        EXPECT_THAT(
            refusal(
                database,
                fmt::format(
                    "UPDATE loadline.alert SET state = '{}', row_version = 4 WHERE alert_id = {}",
                    other, id)),
            HasSubstr("which is final"));
        database.exec(fmt::format("UPDATE loadline.alert SET wave = 'w1' WHERE alert_id = {}", id));
    }
}

TEST(AlertRow, RaisesItsVersionWithStateAndSeverity) {
    Database database;
    alert(database, "open");
    auto const update = [](std::string_view what) {
        return fmt::format("UPDATE loadline.alert SET {}", what);
    };
    EXPECT_THAT(refusal(database, update("row_version = 2")), HasSubstr("version 2 is stale"));
    EXPECT_THAT(refusal(database, update("state = 'waived'")), HasSubstr("version 3 is stale"));
    EXPECT_THAT(refusal(database, update("severity = 'warning'")), HasSubstr("version 3 is stale"));
    EXPECT_EQ(refusal(database, update("observed = 111, worst_observed = 121")), "");
    EXPECT_EQ(refusal(database, update("severity = 'warning', row_version = 4")), "");
    EXPECT_EQ(refusal(database, update("state = 'waived', row_version = 5")), "");
}

TEST(AlertRow, IsOneLiveOneALimitAndSubject) {
    Database database;
    alert(database, "open");
    auto const next = [](std::string_view subject) {
        return fmt::format(R"(
            INSERT INTO loadline.alert (
                limit_id, subject_kind, subject, measure, severity, state, episode, observed, level, worst_observed, opened_at,
                opened_by_assessment, changed_at, changed_by_assessment, cause)
            SELECT limit_id, subject_kind, '{}', measure, severity, 'open', episode + 1, observed, level, worst_observed, opened_at,
                opened_by_assessment, changed_at, changed_by_assessment, cause
            FROM loadline.alert WHERE subject = 'C1')",
                           subject);
    };
    EXPECT_THAT(refusal(database, next("C1")), HasSubstr("alert_one_live"));
    EXPECT_EQ(refusal(database, next("C2")), "");
    database.exec(
        "UPDATE loadline.alert SET state = 'cured', ended_at = now(), end_reason = 'exposure', "
        "row_version = 4 WHERE subject = 'C1'");
    EXPECT_EQ(refusal(database, next("C1")), "");
}

TEST(AlertEvents, AreNeverChangedEvenByTheirOwner) {
    Database database;
    database.exec(acknowledge(alert(database, "open"), 3));
    database.exec("SET ROLE loadline_owner");
    for (auto const* const statement :
         {"UPDATE loadline.alert_event SET note = 'x'", "DELETE FROM loadline.alert_event",
          "TRUNCATE loadline.alert_event", "TRUNCATE loadline.alert CASCADE"})
        EXPECT_THAT(refusal(database, statement), HasSubstr("alert_event is append-only"));
    database.exec("RESET ROLE; SET session_replication_role = replica");
    EXPECT_THAT(refusal(database, "DELETE FROM loadline.alert_event"), HasSubstr("append-only"));
    EXPECT_EQ(database.value("SELECT note FROM loadline.alert_event"), "called them");
}

// Rights ------------------------------------------------------------------------------------------

constexpr auto roles =
    "(VALUES (1, 'loadline_engine'), (2, 'loadline_loader'), (3, 'loadline_desk'), (4, "
    "'loadline_limits'), "
    "(5, 'loadline_reader'), (6, 'public')) AS r (nth, role)";

TEST(Rights, OnTablesAreThese) {
    Database database;
    // s select, i insert, u update, d delete, t truncate
    EXPECT_EQ("table engine loader desk limits reader public\n" +
                  lines(database.query(fmt::format(R"(
        SELECT c.relname, string_agg(coalesce(nullif(concat(
            CASE WHEN has_table_privilege(r.role, c.oid, 'SELECT') THEN 's' END,
            CASE WHEN has_table_privilege(r.role, c.oid, 'INSERT') THEN 'i' END,
            CASE WHEN has_table_privilege(r.role, c.oid, 'UPDATE') THEN 'u' END,
            CASE WHEN has_table_privilege(r.role, c.oid, 'DELETE') THEN 'd' END,
            CASE WHEN has_table_privilege(r.role, c.oid, 'TRUNCATE') THEN 't' END,
            CASE WHEN has_table_privilege(r.role, c.oid, 'REFERENCES') THEN ' references' END,
            CASE WHEN has_table_privilege(r.role, c.oid, 'TRIGGER') THEN ' trigger' END), ''), '-'), ' ' ORDER BY r.nth)
        FROM pg_class AS c CROSS JOIN {}
        WHERE c.relnamespace = 'loadline'::regnamespace AND c.relkind IN ('r', 'v')
        GROUP BY c.relname ORDER BY c.relname COLLATE "C")",
                                                   roles))),
              "table engine loader desk limits reader public\n"
              "alert siu - s s s -\n"
              "alert_event si - s s s -\n"
              "assessment siu - s s s -\n"
              "capital s siud - - - -\n"
              "change_log sd - - - - -\n"
              "config_version siu - s s s -\n"
              "connected_group s siud - - - -\n"
              "counterparty s siud - - - -\n"
              "counterparty_risk siud - s s s -\n"
              "exposure s siud - - - -\n"
              "facility_exposure siud - s s s -\n"
              "fx_rate s siud - - - -\n"
              "group_member s siud - - - -\n"
              "limit_usage siud - s s s -\n"
              "rating s siud - - - -\n"
              "schema_step s s s s s -\n"
              "set_aside siu - s s s -\n"
              "subject_name - - s s s -\n");
}

TEST(Rights, OnFunctionsAreThese) {
    Database database;
    EXPECT_EQ("function engine loader desk limits reader public\n" +
                  lines(database.query(fmt::format(R"(
        SELECT p.proname, string_agg(CASE WHEN has_function_privilege(r.role, p.oid, 'EXECUTE') THEN 'x' ELSE '-' END, ' ' ORDER BY r.nth)
        FROM pg_proc AS p CROSS JOIN {}
        WHERE p.pronamespace = 'loadline'::regnamespace GROUP BY p.proname ORDER BY p.proname COLLATE "C")",
                                                   roles))),
              "function engine loader desk limits reader public\n"
              "acknowledge - - x - - -\n"
              "decide - - - - - -\n"
              "guard_alert - - - - - -\n"
              "hint_change - - - - - -\n"
              "log_change - - - - - -\n"
              "refuse_change - - - - - -\n"
              "request_assessment x - - - - -\n"
              "take_back - - x - - -\n");
}

TEST(Rights, OnTheSchemaAreToUseItAndOfTheEngineToMakeTemporaryTables) {
    Database database;
    EXPECT_EQ(lines(database.query(fmt::format(R"(
        SELECT r.role, has_schema_privilege(r.role, 'loadline', 'USAGE'), has_schema_privilege(r.role, 'loadline', 'CREATE')
        FROM {} ORDER BY r.nth)",
                                               roles))),
              "loadline_engine t f\nloadline_loader t f\nloadline_desk t f\nloadline_limits t "
              "f\nloadline_reader t f\npublic f f\n");
    EXPECT_EQ(
        lines(database.query("SELECT rolname FROM pg_roles WHERE rolname LIKE 'loadline%' AND "
                             "(rolcanlogin OR rolsuper OR rolcreaterole OR rolcreatedb)")),
        "");
    // Also where the bank takes the right from everybody. A copied database has lost such grants,
    // so the step is applied to it again.
    auto const step =
        std::ranges::find(process::schema_steps(), "roles", &process::SchemaStep::name);
    database.exec(fmt::format("REVOKE TEMPORARY ON DATABASE {} FROM PUBLIC; BEGIN; {} COMMIT",
                              database.name(), step->text));
    database.exec("SET ROLE loadline_engine");
    EXPECT_EQ(refusal(database, "CREATE TEMPORARY TABLE figures (x double precision)"), "");
    database.exec("SET ROLE loadline_desk");
    EXPECT_THAT(refusal(database, "CREATE TEMPORARY TABLE figures (x double precision)"),
                HasSubstr("permission denied"));
}

TEST(Rights, OfTheDeskAreToDecideAndNothingElse) {
    Database database;
    auto const id = alert(database, "open");
    for (auto const* const role :
         {"loadline_engine", "loadline_loader", "loadline_limits", "loadline_reader"}) {
        database.exec(fmt::format("SET ROLE {}", role));
        EXPECT_THAT(refusal(database, acknowledge(id, 3)), HasSubstr("permission denied")) << role;
    }
    database.exec("SET ROLE loadline_desk");
    EXPECT_THAT(refusal(database, "UPDATE loadline.alert SET owner = ''"),
                HasSubstr("permission denied"));
    EXPECT_THAT(
        refusal(database, "SELECT loadline.decide(1, 3, 'cured', 'open', 'cured', 'x', NULL)"),
        HasSubstr("permission denied"));
    EXPECT_EQ(database.value(acknowledge(id, 3)), "4");
}

TEST(Functions, ThatActForOthersHaveAFixedSearchPath) {
    Database database;
    EXPECT_EQ(lines(database.query(R"(
        SELECT proname FROM pg_proc
        WHERE pronamespace = 'loadline'::regnamespace AND NOT coalesce('search_path=pg_catalog, pg_temp' = ANY (proconfig), false))")),
              "");
}

}  // namespace
