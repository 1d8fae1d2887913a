#include "daemon/schema.hpp"

#include "daemon/digest.hpp"

#include <fmt/format.h>
#include <pqxx/pqxx>

#include <algorithm>
#include <map>
#include <optional>

namespace process {
namespace {

// What the steps stand on: the owner, the schema, and the list of steps.
constexpr std::string_view ground = R"sql(
DO $$
BEGIN
    IF NOT EXISTS (SELECT FROM pg_catalog.pg_roles WHERE rolname = 'loadline_owner') THEN
        CREATE ROLE loadline_owner NOLOGIN;
    END IF;
    IF NOT pg_catalog.pg_has_role(current_user, 'loadline_owner', 'MEMBER') THEN
        EXECUTE pg_catalog.format('GRANT loadline_owner TO %I', current_user);
    END IF;
END
$$;
CREATE SCHEMA IF NOT EXISTS loadline AUTHORIZATION loadline_owner;
SET LOCAL ROLE loadline_owner;
CREATE TABLE IF NOT EXISTS loadline.schema_step (
    number     integer     PRIMARY KEY,
    name       text        NOT NULL,
    checksum   text        NOT NULL,
    applied_at timestamptz NOT NULL DEFAULT pg_catalog.now(),
    applied_by text        NOT NULL DEFAULT session_user
);
COMMENT ON SCHEMA loadline IS 'credit exposures, the risk on them, limits and alerts';
COMMENT ON TABLE loadline.schema_step IS 'the steps that made this schema, each applied once';
COMMENT ON COLUMN loadline.schema_step.number IS 'the order in which steps are applied';
COMMENT ON COLUMN loadline.schema_step.name IS 'the name of the file it came from';
COMMENT ON COLUMN loadline.schema_step.checksum IS 'SHA-256 of the step''s text';
COMMENT ON COLUMN loadline.schema_step.applied_at IS 'when it was applied';
COMMENT ON COLUMN loadline.schema_step.applied_by IS 'the login that applied it';
)sql";

struct Applied {
    std::string name;
    std::string checksum;
};

std::map<int, Applied> applied_steps(pqxx::transaction_base& work) {
    std::map<int, Applied> applied;
    if (work.exec1("SELECT to_regclass('loadline.schema_step') IS NULL")[0].as<bool>())
        return applied;
    for (auto const& row : work.exec("SELECT number, name, checksum FROM loadline.schema_step"))
        applied[row[0].as<int>()] = {row[1].as<std::string>(), row[2].as<std::string>()};
    return applied;
}

// Why steps already applied and this program do not go together.
std::vector<std::string> contradictions(std::map<int, Applied> const& applied) {
    std::vector<std::string> problems;
    for (auto const& [number, step] : applied) {
        auto const own = std::ranges::find(schema_steps(), number, &SchemaStep::number);
        if (own == schema_steps().end()) {
            problems.push_back(
                fmt::format("the database has schema step {} ({}), this program ends at step {}: "
                            "use the program that goes with the database",
                            number, step.name, schema_steps().back().number));
        } else if (sha256(own->text) != step.checksum) {
            problems.push_back(
                fmt::format("schema step {} ({}) was applied with another text than this "
                            "program's: checksum {} in the database, {} here",
                            number, step.name, step.checksum, sha256(own->text)));
        }
    }
    return problems;
}

// Names are UTF-8 throughout; a database that does not know its texts' encoding cannot promise it.
std::optional<std::string> encoding_problem(pqxx::transaction_base& work) {
    auto const encoding = work.exec1("SHOW server_encoding")[0].as<std::string>();
    if (encoding == "UTF8") return std::nullopt;
    return fmt::format("the database's encoding is {}: use one created with ENCODING 'UTF8'",
                       encoding);
}

std::string record_of(SchemaStep const& step, pqxx::transaction_base const* work) {
    auto const quoted = [&](std::string_view text) {
        return work != nullptr ? work->quote(std::string{text}) : fmt::format("'{}'", text);
    };
    return fmt::format(
        "INSERT INTO loadline.schema_step (number, name, checksum) VALUES ({}, {}, {})",
        step.number, quoted(step.name), quoted(sha256(step.text)));
}

}  // namespace

std::vector<std::string> apply_schema(std::string const& database) try {
    Connection connection{database, "schema", ""};
    return sorted([&] {
        auto& session = connection.session();
        {
            pqxx::work work{session};
            if (auto const problem = encoding_problem(work))
                throw DatabaseError{Trouble::usage, "55000", *problem};
            work.exec("SELECT pg_advisory_lock(1819238756, 3)");
            work.exec(std::string{ground});
            work.commit();
        }
        std::map<int, Applied> applied;
        {
            pqxx::read_transaction work{session};
            applied = applied_steps(work);
        }
        if (auto const problems = contradictions(applied); !problems.empty())
            throw DatabaseError{Trouble::usage, "55000", problems.front()};
        std::vector<std::string> names;
        for (auto const& step : schema_steps()) {
            if (applied.contains(step.number)) continue;
            pqxx::work work{session};
            work.exec("SET LOCAL ROLE loadline_owner");
            work.exec(std::string{step.text});
            work.exec("SET LOCAL ROLE loadline_owner");
            work.exec(record_of(step, &work));
            work.commit();
            names.emplace_back(step.name);
        }
        return names;
    });
} catch (DatabaseError const& error) {
    if (error.trouble() != Trouble::denied) throw;
    throw DatabaseError{
        Trouble::denied, error.sqlstate(),
        fmt::format("{}: the installing login needs CREATEROLE and CREATE on the database; "
                    "`loadline schema install --print` writes the SQL for one who has them",
                    error.what())};
}

bool is_installed(Connection& connection) {
    return sorted([&] {
        pqxx::nontransaction work{connection.session()};
        return !applied_steps(work).empty();
    });
}

std::vector<std::string> schema_problems(Connection& connection) {
    return sorted([&]() -> std::vector<std::string> {
        pqxx::nontransaction work{connection.session()};
        auto const applied = applied_steps(work);
        if (applied.empty()) return {"the schema is not installed: run `loadline schema install`"};
        auto problems = contradictions(applied);
        if (auto const problem = encoding_problem(work)) problems.push_back(*problem);
        for (auto const& step : schema_steps())
            if (!applied.contains(step.number))
                problems.push_back(
                    fmt::format("schema step {} ({}) is missing: run `loadline schema upgrade`",
                                step.number, step.name));
        auto const silent = work.exec(R"sql(
            SELECT input.name, wanted.trigger
            FROM unnest(ARRAY['counterparty', 'connected_group', 'group_member', 'rating', 'exposure', 'fx_rate', 'capital']) AS input (name)
            CROSS JOIN unnest(ARRAY['log_insert', 'log_update', 'log_delete', 'log_truncate']) AS wanted (trigger)
            WHERE NOT EXISTS (
                SELECT FROM pg_trigger AS t
                WHERE t.tgrelid = to_regclass('loadline.' || input.name) AND t.tgname = wanted.trigger AND t.tgenabled = 'A'))sql");
        for (auto const& row : silent)
            problems.push_back(fmt::format(
                "trigger {} of loadline.{} is missing or not ENABLE ALWAYS: its changes would go "
                "unseen until the next whole pass",
                row[1].as<std::string>(), row[0].as<std::string>()));
        return problems;
    });
}

namespace {

std::string as_sql(SchemaStep const& step) {
    return fmt::format(
        "\n-- step {}: {}\nBEGIN;\nSET LOCAL ROLE loadline_owner;\n{}\n"
        "SET LOCAL ROLE loadline_owner;\n{};\nCOMMIT;\n",
        step.number, step.name, step.text, record_of(step, nullptr));
}

}  // namespace

std::string schema_as_sql() {
    std::string text = fmt::format(
        "-- Run as the login that shall install: psql --set ON_ERROR_STOP=1 --file THIS_FILE\n"
        "BEGIN;\n{}COMMIT;\n",
        ground);
    for (auto const& step : schema_steps()) text += as_sql(step);
    return text;
}

std::string missing_steps_as_sql(Connection& connection) {
    return sorted([&] {
        pqxx::nontransaction work{connection.session()};
        auto const applied = applied_steps(work);
        std::string text;
        for (auto const& step : schema_steps())
            if (!applied.contains(step.number)) text += as_sql(step);
        return text;
    });
}

}  // namespace process
