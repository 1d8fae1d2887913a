#pragma once

#include "config/load.hpp"

#include <filesystem>

namespace process {

// The log: one line an event on standard error, with the journal's priority before it where the
// journal reads it. level: a word of service.yaml.
void start_log(std::string const& level);

// Serves until SIGTERM or SIGINT; SIGHUP reads limits and model again. Returns the exit code.
int serve(config::Rules rules, std::filesystem::path const& folder);

}  // namespace process
