#pragma once

#include "daemon/connection.hpp"

#include <span>
#include <string>
#include <string_view>
#include <vector>

// The schema's numbered steps: each applied once, in order, in a transaction of its own.

namespace process {

struct SchemaStep {
    int number;
    std::string_view name;
    std::string_view text;
};

// The steps this program was built with, by number.
std::span<SchemaStep const> schema_steps();

// Applies the steps the database lacks, as the login of `database` and as loadline_owner, under an
// advisory lock; returns the names of those applied. Safe to repeat. Refuses a database that a
// newer program made, and one whose applied steps differ from this program's.
std::vector<std::string> apply_schema(std::string const& database);

// What keeps this program from working on the database; empty when all is well.
std::vector<std::string> schema_problems(Connection& connection);

// Whether any step has been applied.
bool is_installed(Connection& connection);

// As SQL for those who run it themselves: everything, or the steps an installed schema lacks.
std::string schema_as_sql();
std::string missing_steps_as_sql(Connection& connection);

}  // namespace process
