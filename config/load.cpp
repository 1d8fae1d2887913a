#include "config/load.hpp"

#include "config/parts.hpp"

#include <date/tz.h>

#include <algorithm>
#include <array>
#include <exception>
#include <utility>

namespace config {
namespace {

// "100 ms" or "1 s"; nothing for anything else.
std::optional<std::chrono::milliseconds> duration(std::string_view text) {
    auto const blank = text.find(' ');
    if (blank == std::string_view::npos) return std::nullopt;
    auto const count = whole_number(text.substr(0, blank));
    auto const unit = text.substr(blank + 1);
    constexpr long longest = 1'000'000;  // far outside the domain, well inside the type
    if (!count || *count > longest) return std::nullopt;
    if (unit == "ms") return std::chrono::milliseconds{*count};
    if (unit == "s") return std::chrono::seconds{*count};
    return std::nullopt;
}

bool is_time_zone(std::string const& name) {
    try {
        return date::locate_zone(name) != nullptr;
    } catch (std::exception const&) {  // what the library says of a name it does not know
        return false;
    }
}

Part<Service> read_service(std::filesystem::path const& folder) {
    File file{folder, "service.yaml"};
    Service service;
    YamlNode const root = read_yaml(file);
    Keys keys{file, root};
    if (auto const database = read_text(file, keys.find("database"), "a libpq connection string"))
        service.database = *database;

    auto const* const zone = keys.find("time_zone");
    auto const zone_expected = "a name of the tz database such as Europe/Vienna";
    if (auto const name = read_text(file, zone, zone_expected)) {
        service.time_zone = *name;
        if (!is_time_zone(*name))
            file.fault(zone->place, "unknown time zone " + in_quotes(*name), zone_expected);
    }

    auto const* const poll = keys.find("poll");
    auto const poll_expected = "a time from 10 ms to 60 s such as 100 ms or 1 s";
    if (auto const text = read_text(file, poll, poll_expected)) {
        auto const time = duration(*text);
        if (time && *time >= std::chrono::milliseconds{10} && *time <= std::chrono::seconds{60})
            service.poll = *time;
        else
            file.fault(poll->place, in_quotes(*text), poll_expected);
    }

    auto const* const threads = keys.find("threads");
    if (auto const text = read_text(file, threads, "all, or a whole number from 1 to 1024");
        text && *text != "all")
        service.threads = static_cast<unsigned>(read_whole(file, threads, 1, 1024).value_or(0));

    constexpr std::array<std::string_view, 5> levels{"trace", "debug", "info", "warning", "error"};
    if (auto const level = read_word(file, keys.find("log"), levels)) service.log = *level;

    keys.refuse_later({"listen", "inputs", "business_day"});
    keys.finish();
    Part<Service> part{std::move(service), {}};
    part.files.push_back(std::move(file));
    return part;
}

void append_faults(std::deque<File> const& files, std::vector<Fault>& faults) {
    for (auto const& file : files) {
        auto const first = faults.insert(faults.end(), file.faults().begin(), file.faults().end());
        std::stable_sort(first, faults.end(), [](Fault const& a, Fault const& b) {
            return std::pair{a.line, a.column} < std::pair{b.line, b.column};
        });
    }
}

Files texts(std::deque<File> const& files) {
    Files texts;
    for (auto const& file : files) texts.emplace(file.name(), file.text());
    return texts;
}

}  // namespace

std::variant<Rules, std::vector<Fault>> load(std::filesystem::path const& folder) {
    auto service = read_service(folder);
    auto model = read_model(folder);
    auto limits = read_limits(folder, model.value);

    std::vector<Fault> faults;
    append_faults(service.files, faults);
    append_faults(model.files, faults);
    append_faults(limits.files, faults);
    if (!faults.empty()) return faults;

    return Rules{.service = std::move(service.value),
                 .model = std::make_shared<model::Settings const>(std::move(model.value)),
                 .limits = std::make_shared<alerts::Limits const>(std::move(limits.value)),
                 .service_files = texts(service.files),
                 .model_files = texts(model.files),
                 .limits_files = texts(limits.files)};
}

std::variant<Service, std::vector<Fault>> load_service(std::filesystem::path const& folder) {
    auto service = read_service(folder);
    std::vector<Fault> faults;
    append_faults(service.files, faults);
    if (!faults.empty()) return faults;
    return std::move(service.value);
}

}  // namespace config
