#pragma once

#include "model/settings.hpp"
#include "tests/support/model_book.hpp"

#include <cstdint>
#include <string>

namespace tests {

// A book that nobody would think of, and what is odd about it.
struct RandomBook {
    Names names;
    model::Settings settings;
    std::string describe;
};

// The book of a seed: 1 to 5,000 names with exposures of a Pareto distribution, some of them in
// round lots; default probabilities from 0 to 0.3 by grade, asset correlations from 0.01 to 0.8 by
// grade and some by name; rows of zero exposure and names in default; one to thirty indices; both
// loss kinds, fixed and beta distributed recoveries; confidence from 0.95 to 0.9999.
RandomBook random_book(std::uint64_t seed);

}  // namespace tests
