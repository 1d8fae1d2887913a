#include "model/units.hpp"

#include <array>
#include <cstdio>

namespace model {

bool is_reserved(std::string_view code) {
    return code == "default" || code == "withdrawn" || code == "unknown" || code == "others" ||
           code == "by";
}

std::string iso(Day day) {
    std::chrono::year_month_day const date{day};
    std::array<char, 24> text{};
    std::snprintf(text.data(), text.size(), "%04d-%02u-%02u", static_cast<int>(date.year()),
                  static_cast<unsigned>(date.month()), static_cast<unsigned>(date.day()));
    return text.data();
}

std::string iso(Time time) {
    auto const day = std::chrono::floor<std::chrono::days>(time);
    std::chrono::hh_mm_ss const clock{time - day};
    std::array<char, 32> text{};
    std::snprintf(text.data(), text.size(), "T%02ld:%02ld:%02ld.%06ldZ", clock.hours().count(),
                  clock.minutes().count(), clock.seconds().count(), clock.subseconds().count());
    return iso(day) + text.data();
}

}  // namespace model
