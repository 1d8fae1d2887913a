#pragma once

#include "config/load.hpp"
#include "daemon/connection.hpp"
#include "daemon/tables.hpp"

#include <cstdint>
#include <functional>
#include <optional>
#include <string_view>

// The engine held against the judge on the book in the tables.

namespace process {

struct VerifyPlan {
    // Of the judge; nothing: model.yaml's.
    std::optional<std::uint64_t> scenarios;  // >= 1,000
    std::optional<std::uint64_t> seed;
};

struct Verification {
    Rows checks;
    bool agrees = false;
    std::string note;  // what became of the finding
};

// Assesses the book anew under the plan of the newest whole assessment by this model, judges it by
// a shifted simulation and compares (model/verify.hpp). Where that assessment is of this very book
// and plan and still the newest, its figures as they stand in the tables are checked too, and the
// finding becomes its health; else nothing is written. `tell` hears what is going on.
Verification verify(Connection& connection, config::Rules const& rules, VerifyPlan const& plan,
                    std::function<void(std::string_view)> const& tell);

}  // namespace process
