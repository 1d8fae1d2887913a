#pragma once

#include "model/units.hpp"

#include <Eigen/Core>

#include <cstddef>
#include <cstdint>
#include <string_view>
#include <utility>
#include <vector>

namespace model {

// How the loss distribution is taken back from its transform. windowed: a smoothed loss, on few
// nodes. lattice: losses on a lattice of a stated unit, every atom of it.
enum class Inversion { windowed, lattice };
inline constexpr std::pair<Inversion, std::string_view> inversion_words[] = {
    {Inversion::windowed, "windowed inversion"}, {Inversion::lattice, "lattice inversion"}};

// A component of the mixture that the systematic factors are drawn from: N(mean, I).
struct Component {
    Eigen::VectorXd mean;
    std::uint32_t points = 0;  // a scrambling
    friend bool operator==(Component const&, Component const&) = default;
};

// At most so many parts are reckoned apart: scramblings, or shares of a quadrature rule.
inline constexpr std::size_t parts_max = 16;

// Everything about how the figures of a book are reached that is not the book: the same plan on the
// same book gives the same bits. Found once for a book (pilot.cpp) and kept while it serves.
struct Plan {
    Inversion inversion = Inversion::windowed;
    std::uint64_t seed = 1;
    std::uint32_t scramblings = 16;  // independent; with one factor or two, points are a rule
    std::vector<Component> mixture;
    double damping = 0.0;     // real part of the contour, per base currency
    double period = 0.0;      // of the inverted functions, base currency
    double lowest = 0.0;      // where they begin: the loss, less what staying costs, is above it
    std::uint32_t nodes = 0;  // on the contour
    // Base currency, the one or the other: the resolution at which "loss = quantile" is taken.
    double width = 0.0;            // of the window; 0: none
    double unit = 0.0;             // of the lattice; 0: none
    double large_from = 0.0;       // names that can lose as much have a factor of their own
    double effective_share = 1.0;  // of the points, in the tail, when the plan was found
    double strain = 0.0;  // then: what it left out over what a plan may leave out, the largest
    friend bool operator==(Plan const&, Plan const&) = default;
};

}  // namespace model
