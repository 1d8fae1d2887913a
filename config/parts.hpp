#pragma once

#include "alerts/limit.hpp"
#include "config/load.hpp"
#include "config/strict.hpp"
#include "model/settings.hpp"

#include <deque>
#include <filesystem>

// What load() is made of: each kind of rules, from files of its own.

namespace config {

// Values as far as they could be read, and the files they come from with their faults. Only
// without a fault are the values complete.
template <class Value>
struct Part {
    Value value;
    std::deque<File> files;  // the YAML file first
};

Part<model::Settings> read_model(std::filesystem::path const& folder);

// No base currency or no grades in `settings`: they could not be read, and what depends on them
// goes unchecked.
Part<alerts::Limits> read_limits(std::filesystem::path const& folder,
                                 model::Settings const& settings);

}  // namespace config
