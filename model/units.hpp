#pragma once

#include <algorithm>
#include <array>
#include <chrono>
#include <cmath>
#include <compare>
#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <utility>
#include <vector>

// The units every room speaks in.

namespace model {

// An amount of the base currency, held as a whole number of thousandths, so that sums are exact in
// any order. Domain: |amount| < 9.2e15 units.
class Money {
public:
    constexpr Money() = default;

    static constexpr Money from_thousandths(std::int64_t thousandths) { return Money{thousandths}; }

    // The nearest thousandth, half to even. Nothing for what is not finite or out of range.
    static std::optional<Money> from_units(double units) {
        double const scaled = std::nearbyint(units * 1000.0);
        if (!(std::abs(scaled) <= 9.2e18)) return std::nullopt;
        return Money{static_cast<std::int64_t>(scaled)};
    }

    [[nodiscard]] constexpr std::int64_t thousandths() const { return thousandths_; }
    [[nodiscard]] constexpr double units() const {
        return static_cast<double>(thousandths_) / 1000.0;
    }

    // A sum out of range stays at the largest amount: absurd rows must neither wrap to a small one
    // nor stop the process.
    constexpr Money& operator+=(Money other) {
        bool const up = other.thousandths_ > 0;
        bool const over = __builtin_add_overflow(thousandths_, other.thousandths_, &thousandths_);
        if (over) thousandths_ = up ? largest : -largest;
        thousandths_ = std::clamp(thousandths_, -largest, largest);
        return *this;
    }
    constexpr Money& operator-=(Money other) { return *this += Money{-other.thousandths_}; }
    friend constexpr Money operator+(Money a, Money b) { return a += b; }
    friend constexpr Money operator-(Money a, Money b) { return a -= b; }
    friend constexpr auto operator<=>(Money, Money) = default;

private:
    static constexpr std::int64_t largest = 9'200'000'000'000'000'000;

    explicit constexpr Money(std::int64_t thousandths) : thousandths_{thousandths} {}
    std::int64_t thousandths_ = 0;
};

// A number in [0, 1]. One template, two tags: a probability never passes for a fraction by
// accident.
template <class Tag>
class UnitInterval {
public:
    constexpr UnitInterval() = default;

    static constexpr std::optional<UnitInterval> from_fraction(double x) {
        if (!(x >= 0.0 && x <= 1.0)) return std::nullopt;  // turned this way round, NaN is refused
        return UnitInterval{x};
    }

    [[nodiscard]] constexpr double value() const { return value_; }
    friend constexpr auto operator<=>(UnitInterval, UnitInterval) = default;

private:
    explicit constexpr UnitInterval(double x) : value_{x} {}
    double value_ = 0.0;
};

using Probability = UnitInterval<struct ProbabilityTag>;
using Fraction = UnitInterval<struct FractionTag>;

// A place on the grade scale: 0 is the best grade, the highest rank is default.
struct Grade {
    std::uint8_t rank = 0;
    friend constexpr auto operator<=>(Grade, Grade) = default;
};

// The firm's grades, best first. `default` follows the last of them and is not listed.
class GradeScale {
public:
    GradeScale() = default;
    explicit GradeScale(std::vector<std::string> names) : names_{std::move(names)} {}

    [[nodiscard]] std::size_t size() const { return names_.size(); }
    [[nodiscard]] Grade in_default() const { return Grade{static_cast<std::uint8_t>(size())}; }

    [[nodiscard]] std::string_view name(Grade grade) const {
        return grade.rank < size() ? std::string_view{names_[grade.rank]} : "default";
    }
    [[nodiscard]] std::optional<Grade> find(std::string_view name) const {
        for (std::size_t rank = 0; rank <= size(); ++rank) {
            Grade const grade{static_cast<std::uint8_t>(rank)};
            if (this->name(grade) == name) return grade;
        }
        return std::nullopt;
    }

    friend bool operator==(GradeScale const&, GradeScale const&) = default;

private:
    std::vector<std::string> names_;
};

// Words with a meaning of their own wherever codes stand, in the tables and in limits.yaml.
bool is_reserved(std::string_view code);

using Time = std::chrono::sys_time<std::chrono::microseconds>;
using Day = std::chrono::sys_days;

// ISO 8601: 2026-03-31, and 2026-03-31T07:30:00.000000Z.
std::string iso(Day day);
std::string iso(Time time);

// The time of a turn, and the day it falls on in the firm's time zone.
struct Instant {
    Time at{};
    Day day{};
    friend constexpr bool operator==(Instant, Instant) = default;
};

// A sum modulo 2^256 of SHA-256 values: adding and taking away one row is as cheap as the row.
struct Digest {
    std::array<std::uint64_t, 4> words{};  // least significant first

    Digest& operator+=(Digest const& other) {
        bool carry = false;
        for (std::size_t i = 0; i < words.size(); ++i) {
            bool const over = __builtin_add_overflow(words[i], other.words[i], &words[i]);
            carry = __builtin_add_overflow(words[i], std::uint64_t{carry}, &words[i]) || over;
        }
        return *this;
    }
    friend bool operator==(Digest const&, Digest const&) = default;
};

}  // namespace model
