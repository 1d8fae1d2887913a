#include "tests/support/database.hpp"
#include "tests/support/program.hpp"

#include <gmock/gmock.h>
#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include <filesystem>
#include <string>
#include <vector>

// The real program holding its engine against its judge.

namespace tests {
namespace {

using nlohmann::json;
using testing::HasSubstr;

class Verify : public testing::Test {
protected:
    Verify()
        : environment{"PGDATABASE=" + database.name(),
                      "LOADLINE_CONFIG=" + config.path().string()} {
        copy_shipped_configuration(config);
        database.exec(R"sql(
            INSERT INTO loadline.counterparty (counterparty_id, legal_name, sector, country)
            SELECT 'C' || n, 'Company ' || n, (ARRAY['MANUF', 'RETAIL', 'ENERGY'])[1 + n % 3], 'AT'
            FROM generate_series(1, 120) AS n;
            INSERT INTO loadline.rating (counterparty_id, rated_at, grade)
            SELECT 'C' || n, now() - interval '30 days', 'G' || 3 + n % 4 FROM generate_series(1, 120) AS n;
            INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn)
            SELECT 'F' || n, 'C' || n, 'term_loan', 'EUR', round(3e7 / (1 + n / 20.0))
            FROM generate_series(1, 120) AS n;
            INSERT INTO loadline.capital VALUES ('tier1', current_date, 4e8), ('own_funds', current_date, 5e8))sql");
    }

    Ran verify(std::vector<std::string> more = {"--scenarios", "50000"}) const {
        more.insert(more.begin(), {"verify", "--format", "json"});
        return run_loadline(more, environment);
    }
    void assess() const { ASSERT_EQ(run_loadline({"assess"}, environment).code, 0); }
    std::string health() {
        return database.value(
            "SELECT string_agg(health, ' ' ORDER BY sequence) FROM loadline.assessment");
    }

    Database database;
    Folder config;
    std::vector<std::string> environment;
};

TEST_F(Verify, FindsThatWhatWasWrittenAgrees) {
    assess();
    auto const ran = verify();
    EXPECT_EQ(ran.code, 0) << ran.out << ran.err;
    EXPECT_EQ(health(), "agrees");
    auto const checks = json::parse(ran.out);
    EXPECT_EQ(checks.at(0).at("what"), "expected_loss");
    EXPECT_EQ(checks.back().at("what"), "names written as assessed");
    EXPECT_EQ(checks.back().at("judge"), 120);
    for (auto const& check : checks) EXPECT_EQ(check.at("agrees"), "yes") << check;
}

TEST_F(Verify, FindsTheFigureThatSomebodyChanged) {
    assess();
    database.exec(
        "UPDATE loadline.counterparty_risk SET es_contribution = 1.01 * es_contribution "
        "WHERE counterparty_id = 'C7'");
    auto const ran = verify();
    EXPECT_EQ(ran.code, 1) << ran.err;
    EXPECT_EQ(health(), "differs");
    auto const checks = json::parse(ran.out);
    EXPECT_EQ(checks.back().at("judge"), 119);
    EXPECT_EQ(checks.back().at("agrees"), "no");
}

TEST_F(Verify, WritesNothingWhereTheBookMovedOn) {
    auto const early = verify();
    EXPECT_EQ(early.code, 0) << early.err;
    EXPECT_THAT(early.err, HasSubstr("nothing has been assessed yet"));
    assess();
    database.exec("UPDATE loadline.exposure SET drawn = 1e6 WHERE exposure_id = 'F1'");
    auto const ran = verify();
    EXPECT_EQ(ran.code, 0) << ran.err;
    EXPECT_THAT(ran.err, HasSubstr("moved on"));
    EXPECT_EQ(health(), "unverified");
    // The change is the writer's to see.
    EXPECT_EQ(database.value("SELECT count(*) FROM loadline.change_log"), "1");
}

TEST_F(Verify, SaysHowItIsUsed) {
    EXPECT_EQ(verify({"--scenarios", "10"}).code, 2);
    EXPECT_EQ(verify({"--seed", "-1"}).code, 2);
    EXPECT_THAT(verify({"--help"}).out, HasSubstr("0.001 of runs"));
}

}  // namespace
}  // namespace tests
