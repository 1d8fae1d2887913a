#include "daemon/calendar.hpp"

#include <date/tz.h>

#include <chrono>

namespace process {

model::Day day_of(model::Time time, std::string const& time_zone) {
    auto const local = date::locate_zone(time_zone)->to_local(time);
    return model::Day{std::chrono::floor<std::chrono::days>(local.time_since_epoch())};
}

model::Time start_of(model::Day day, std::string const& time_zone) {
    // Where clocks are put forward over midnight the day begins when they have been.
    return date::locate_zone(time_zone)->to_sys(
        date::local_time<std::chrono::microseconds>{day.time_since_epoch()}, date::choose::latest);
}

}  // namespace process
