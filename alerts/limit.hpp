#pragma once

#include "model/units.hpp"

#include <map>
#include <optional>
#include <string>
#include <string_view>
#include <utility>
#include <variant>
#include <vector>

// What limits.yaml says, as values. The loader in config/ has checked that they fit together.

namespace alerts {

// What a limit holds for. `group_or_name` is asked for, never written: it gives connected_group
// subjects, and name subjects for names in no group.
enum class SubjectKind {
    name,
    connected_group,
    group_or_name,
    sector,
    country,
    grade,
    segment,
    portfolio
};

enum class Measure {
    exposure,
    commitment,
    expected_loss,
    var_contribution,
    es_contribution,
    default_probability,
    downgrade_probability,
    concentration_index
};

enum class Unit { money, fraction, index };

enum class Severity { warning, breach };

enum class Total { tier1, own_funds, portfolio };

// "25% of tier1": a fraction of a total.
struct ShareOf {
    double fraction = 0.0;  // >= 0
    Total total = Total::tier1;
    friend bool operator==(ShareOf const&, ShareOf const&) = default;
};

// "EUR 60 m", "25% of tier1", or a probability or index value.
using Level = std::variant<model::Money, ShareOf, double>;

// A level, or one by a fact of the subject: {by: grade, G1: EUR 60 m, …}.
struct LevelRule {
    std::optional<SubjectKind> by;                     // name and portfolio never
    std::map<std::string, Level, std::less<>> levels;  // by code; the key is "" without `by`
    std::optional<Level> others;
    friend bool operator==(LevelRule const&, LevelRule const&) = default;
};

// "85% of breach".
struct ShareOfBreach {
    double fraction = 0.0;  // in [0, 1]
    friend bool operator==(ShareOfBreach const&, ShareOfBreach const&) = default;
};

// Warning levels: none, a share of the breach level, or a rule of their own.
using WarningRule = std::variant<std::monostate, ShareOfBreach, LevelRule>;

// `where`: the names whose fact is one of the codes. Grade ranges are already written out.
struct Selector {
    SubjectKind fact = SubjectKind::segment;  // segment, sector, country, grade, name, group
    std::vector<std::string> codes;
    friend bool operator==(Selector const&, Selector const&) = default;
};

struct Limit {
    std::string limit_id;
    SubjectKind per = SubjectKind::name;
    Measure measure = Measure::exposure;
    SubjectKind across = SubjectKind::name;  // concentration_index: what the shares are of
    std::vector<Selector> where;             // all of them hold
    LevelRule breach_at;
    WarningRule warning_at;
    double cure_margin = 0.05;  // fraction of the level, in [0, 1)
    std::string owner;
    int acknowledge_for_days = 5;  // >= 1
    std::string act;               // what to do, in the limit manager's words
    friend bool operator==(Limit const&, Limit const&) = default;
};

using Limits = std::vector<Limit>;  // in the file's order; ids are unique

// The one spelling of each word, for SQL, YAML and output.
inline constexpr std::pair<SubjectKind, std::string_view> subject_kind_words[] = {
    {SubjectKind::name, "name"},
    {SubjectKind::connected_group, "connected_group"},
    {SubjectKind::group_or_name, "group_or_name"},
    {SubjectKind::sector, "sector"},
    {SubjectKind::country, "country"},
    {SubjectKind::grade, "grade"},
    {SubjectKind::segment, "segment"},
    {SubjectKind::portfolio, "portfolio"},
};
inline constexpr std::pair<Measure, std::string_view> measure_words[] = {
    {Measure::exposure, "exposure"},
    {Measure::commitment, "commitment"},
    {Measure::expected_loss, "expected_loss"},
    {Measure::var_contribution, "var_contribution"},
    {Measure::es_contribution, "es_contribution"},
    {Measure::default_probability, "default_probability"},
    {Measure::downgrade_probability, "downgrade_probability"},
    {Measure::concentration_index, "concentration_index"},
};
inline constexpr std::pair<Unit, std::string_view> unit_words[] = {
    {Unit::money, "money"}, {Unit::fraction, "fraction"}, {Unit::index, "index"}};
inline constexpr std::pair<Severity, std::string_view> severity_words[] = {
    {Severity::warning, "warning"}, {Severity::breach, "breach"}};
inline constexpr std::pair<Total, std::string_view> total_words[] = {
    {Total::tier1, "tier1"}, {Total::own_funds, "own_funds"}, {Total::portfolio, "portfolio"}};

template <class Enum, std::size_t Size>
constexpr std::string_view word(std::pair<Enum, std::string_view> const (&words)[Size],
                                Enum value) {
    for (auto const& [key, text] : words)
        if (key == value) return text;
    return {};
}
template <class Enum, std::size_t Size>
constexpr std::optional<Enum> find(std::pair<Enum, std::string_view> const (&words)[Size],
                                   std::string_view text) {
    for (auto const& [key, spelling] : words)
        if (spelling == text) return key;
    return std::nullopt;
}

// What no name has alone: it depends on the whole book, and is known after a whole pass only.
constexpr bool is_contribution(Measure measure) {
    return measure == Measure::var_contribution || measure == Measure::es_contribution;
}

constexpr Unit unit_of(Measure measure) {
    switch (measure) {
        case Measure::default_probability:
        case Measure::downgrade_probability:
            return Unit::fraction;
        case Measure::concentration_index:
            return Unit::index;
        default:
            return Unit::money;
    }
}

}  // namespace alerts
