#pragma once

#include "alerts/limit.hpp"
#include "model/assess.hpp"

#include <cstdint>
#include <map>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <unordered_map>
#include <utility>
#include <variant>
#include <vector>

// Limits held against measures. Pure: the same book, figures and limits give the same usage.

namespace alerts {

enum class Standing { within, at_level, warning, breach };

inline constexpr std::pair<Standing, std::string_view> standing_words[] = {
    {Standing::within, "within"},
    {Standing::at_level, "at_level"},
    {Standing::warning, "warning"},
    {Standing::breach, "breach"}};

inline constexpr std::pair<model::Held, std::string_view> held_words[] = {
    {model::Held::no, ""},
    {model::Held::rate_old, "rate_old"},
    {model::Held::rate_missing, "rate_missing"},
    {model::Held::row_set_aside, "row_set_aside"},
    {model::Held::level_unknown, "level_unknown"}};

// What a limit holds for, as it is written in every table.
struct SubjectKey {
    std::string limit_id;
    SubjectKind kind = SubjectKind::name;
    std::string subject;
    friend auto operator<=>(SubjectKey const&, SubjectKey const&) = default;
};

// A limit's use by one subject. Amounts in base currency, probabilities as fractions; a share of
// the portfolio is already an amount. `observed_error`: one standard error of observed - breach
// level, 0 where the measure is exact.
struct Usage {
    SubjectKey key;
    Measure measure = Measure::exposure;
    double observed = 0.0;
    double observed_error = 0.0;
    std::optional<double> warning_level;
    std::optional<double> breach_level;  // null: it cannot be formed
    double cure_margin = 0.0;
    model::Held held = model::Held::no;

    // Above a level by more than the figures' own uncertainty; equal is inside.
    [[nodiscard]] bool over(double level) const { return observed - level > 3.0 * observed_error; }
    // At or below a level's release, uncertainty included; a level of 0 clears at 0.
    [[nodiscard]] bool clear(double level) const {
        return observed + 3.0 * observed_error <= level * (1.0 - cure_margin);
    }
    [[nodiscard]] std::optional<Standing> standing() const;  // null without a breach level
    [[nodiscard]] std::optional<double> headroom() const;
    [[nodiscard]] std::optional<double> level(Severity severity) const {
        return severity == Severity::warning && warning_level ? warning_level : breach_level;
    }
};

// A subject a limit holds for whose measure cannot be formed.
struct Unmeasured {
    SubjectKey key;
    std::string reason;
    model::Held held = model::Held::no;  // no: there is nothing to measure; else it may return
};

struct Checks {
    std::vector<Usage> usages;           // by key
    std::vector<Unmeasured> unmeasured;  // by key
    // Exposures of unknown counterparties could belong to any set: no set is believed downward.
    model::Held sets_held = model::Held::no;

    [[nodiscard]] Usage const* find(SubjectKey const& key) const;
    // Whether a subject without usage may be missing only because rows are set aside.
    [[nodiscard]] model::Held held(SubjectKey const& key) const;
};

// One book with its figures, as limits see it: the names, their sets and the totals.
class View {
public:
    using Names = std::span<std::shared_ptr<model::Name const> const>;

    // `errors` gives the contributions' errors; without it they are taken as exact. What is passed
    // must outlive the view.
    View(Names names, Names unknown, std::span<model::NameFigures const> figures,
         model::Figures const* errors, model::Shared const& shared, model::Settings const& settings,
         model::Day day);

    // Every subject of every limit.
    [[nodiscard]] Checks check(Limits const& limits) const;

    // One subject of one limit; nothing where it is out of scope or cannot be measured.
    [[nodiscard]] std::optional<Usage> usage(Limit const& limit, SubjectKind kind,
                                             std::string_view subject) const;

private:
    using Members = std::vector<std::uint32_t>;
    using Sets = std::unordered_map<std::string, Members>;

    struct LevelValue {
        std::optional<double> value{};
        double portfolio_share = 0.0;
        model::Held held = model::Held::no;
        bool total_is_empty = false;
    };

    [[nodiscard]] Sets const& sets(SubjectKind kind) const;
    [[nodiscard]] bool in_scope(Limit const& limit, model::Name const& name) const;
    [[nodiscard]] Members scoped(Limit const& limit, Members const& members) const;
    [[nodiscard]] std::variant<Usage, Unmeasured> measure(Limit const& limit, SubjectKind kind,
                                                          std::string const& subject,
                                                          Members const& members) const;
    [[nodiscard]] std::optional<double> observed(Measure measure, SubjectKind across,
                                                 SubjectKind kind, Members const& members) const;
    [[nodiscard]] std::string code(SubjectKind fact, SubjectKind kind, std::string_view subject,
                                   Members const& members) const;
    [[nodiscard]] LevelValue level(LevelRule const& rule, Limit const& limit, SubjectKind kind,
                                   std::string_view subject, Members const& members) const;
    [[nodiscard]] model::Held held(Limit const& limit, SubjectKind kind, std::string_view subject,
                                   Members const& members) const;

    Names names_;
    Names unknown_;
    std::span<model::NameFigures const> figures_;
    model::Figures const* errors_;
    model::Shared const& shared_;
    model::Settings const& settings_;
    model::Day day_;
    std::map<Measure, double> totals_;  // of the whole book, for the measures in money
    Sets by_name_, by_group_, by_sector_, by_country_, by_grade_, by_segment_, portfolio_;
    model::Held sets_held_ = model::Held::no;      // by exposures of unknown counterparties
    model::Held anything_held_ = model::Held::no;  // by any counterparty
};

// The sum of squared shares of exposure at default across units, 0 to 1; groups that share a member
// count as one unit. Nothing for a set without exposure.
// Source: Herfindahl (1950), Concentration in the steel industry; Hirschman (1964), The paternity
// of an index, American Economic Review 54(5).
std::optional<double> concentration_index(View::Names names, std::span<std::uint32_t const> members,
                                          SubjectKind across);

// All limits against a book and its figures.
Checks check(model::Book const& book, model::Figures const& figures, Limits const& limits);

}  // namespace alerts
