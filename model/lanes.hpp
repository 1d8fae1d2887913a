#pragma once

#include <cstddef>
#include <vector>

// Four doubles that are reckoned with at once. Plain arithmetic on them reads as on one; the
// compiler makes of it what the processor has. Functions marked LOADLINE_LANES are compiled for
// more than one processor and chosen between when the program starts; all of them round alike.

namespace model {

// Aligned as it is where the processor has half as much, so that all code agrees on it.
using Lanes [[gnu::vector_size(32), gnu::aligned(16), gnu::may_alias]] = double;
inline constexpr std::size_t lane_count = 4;

constexpr std::size_t in_lanes(std::size_t count) {
    return (count + lane_count - 1) / lane_count;
}

inline double sum_of(Lanes const& lanes) {
    return (lanes[0] + lanes[1]) + (lanes[2] + lanes[3]);
}

// The four from here on; as LaneArray or std::vector begin, or four further.
inline Lanes const& lanes_at(double const* values) {
    return *reinterpret_cast<Lanes const*>(values);
}

// An array of them, zero to begin with.
class LaneArray {
public:
    explicit LaneArray(std::size_t size = 0) : values_(size * lane_count) {}

    [[nodiscard]] Lanes* data() { return reinterpret_cast<Lanes*>(values_.data()); }
    [[nodiscard]] Lanes const* data() const {
        return reinterpret_cast<Lanes const*>(values_.data());
    }
    [[nodiscard]] Lanes& operator[](std::size_t i) { return data()[i]; }
    [[nodiscard]] Lanes const& operator[](std::size_t i) const { return data()[i]; }
    void clear_to(std::size_t size) { values_.assign(size * lane_count, 0.0); }

private:
    std::vector<double> values_;
};

#if defined(__x86_64__) && !defined(__SANITIZE_ADDRESS__)
#define LOADLINE_LANES [[gnu::target_clones("avx2", "default")]]
#else
#define LOADLINE_LANES
#endif

}  // namespace model
