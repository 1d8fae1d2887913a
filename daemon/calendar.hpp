#pragma once

#include "model/units.hpp"

#include <string>

// Days in the firm's time zone. A zone that does not exist throws std::runtime_error; the loader of
// service.yaml has refused it before.

namespace process {

model::Day day_of(model::Time time, std::string const& time_zone);

// The first instant of a day.
model::Time start_of(model::Day day, std::string const& time_zone);

}  // namespace process
