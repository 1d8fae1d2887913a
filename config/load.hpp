#pragma once

#include "alerts/limit.hpp"
#include "config/strict.hpp"
#include "model/settings.hpp"

#include <chrono>
#include <filesystem>
#include <map>
#include <memory>
#include <string>
#include <variant>
#include <vector>

namespace config {

// service.yaml.
struct Service {
    std::string database;  // a libpq connection string; empty: libpq's own environment
    std::string time_zone = "UTC";
    std::chrono::milliseconds poll{100};
    unsigned threads = 0;  // 0: all
    std::string log = "info";
    friend bool operator==(Service const&, Service const&) = default;
};

// The files that rule one kind, by name: the YAML file and its CSV side files.
using Files = std::map<std::string, std::string>;

// A whole folder, read once and found good.
struct Rules {
    Service service;
    std::shared_ptr<model::Settings const> model;
    std::shared_ptr<alerts::Limits const> limits;
    Files service_files;
    Files model_files;
    Files limits_files;
};

// Reads service.yaml, model.yaml, limits.yaml and the CSV files model.yaml names. Either all of it
// is good, or every mistake of every file is returned, in the order of the files.
std::variant<Rules, std::vector<Fault>> load(std::filesystem::path const& folder);

// Reads service.yaml alone: what a command needs that only talks to the database.
std::variant<Service, std::vector<Fault>> load_service(std::filesystem::path const& folder);

}  // namespace config
