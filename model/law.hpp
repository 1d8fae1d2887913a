#pragma once

#include "model/lanes.hpp"
#include "model/portfolio.hpp"

#include <cstddef>
#include <span>
#include <vector>

namespace model {

// Where names of a kind stand at the horizon once their systematic index is known, tabulated over
// the index, so that a scenario looks up all kinds of an index at once.
//
//     states    p_j(I) for every state j, default last; default_only: default alone
//     moments   p(I), and in revaluation A_r(I) = sum over grades of p_j d_j^r for r = 1, 2, 3
//
//     p_j(I) = Phi((cut_j - sqrt(rho) I) / sqrt(1 - rho)) - the same of the next worse cut
//
// Piecewise cubic through values and slopes, in steps of 1/64 and finer for large asset
// correlations: within 1e-9 of the function for those up to 0.5, 1e-8 up to 0.8, 1e-6 up to 0.99.
class Law {
public:
    enum class Of { states, moments };

    Law() = default;
    Law(Cells const& cells, Of of);

    [[nodiscard]] std::size_t functions() const { return functions_; }
    [[nodiscard]] std::size_t groups() const { return groups_; }  // of lane_count kinds

    // An index's interval, and how far into it, from 0 to 1.
    struct Place {
        Lanes const* row;
        double within;
    };
    [[nodiscard]] Place place(double index) const {
        double const steps =
            index <= -index_max
                ? 0.0
                : (index >= index_max ? last_step_ : (index + index_max) * per_unit_);
        auto const row = static_cast<std::size_t>(steps);
        return {table_.data() + row * row_size_, steps - static_cast<double>(row)};
    }

    // A function for a group of kinds.
    [[gnu::always_inline]] void at(Place const& place, std::size_t function, std::size_t group,
                                   Lanes& value) const {
        Lanes const* const c = place.row + (function * groups_ + group) * 4;
        value = c[0] + place.within * (c[1] + place.within * (c[2] + place.within * c[3]));
    }

    // A function for one kind.
    [[nodiscard]] double at(Place const& place, std::size_t function, std::uint32_t kind) const {
        Lanes value;
        at(place, function, std::size_t{kind / lane_count}, value);
        return value[kind % lane_count];
    }

private:
    static constexpr double index_max = 10.0;  // an index further out is taken to stand here

    std::size_t functions_ = 0;
    std::size_t groups_ = 0;
    std::size_t row_size_ = 0;
    double per_unit_ = 0.0;
    double last_step_ = 0.0;
    LaneArray table_;
};

}  // namespace model
