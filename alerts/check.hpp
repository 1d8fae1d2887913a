#pragma once

#include "alerts/limit.hpp"
#include "model/assess.hpp"

#include <array>
#include <cstdint>
#include <functional>
#include <map>
#include <memory>
#include <optional>
#include <set>
#include <span>
#include <string>
#include <string_view>
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
    friend bool operator==(Usage const&, Usage const&) = default;
};

// A subject a limit holds for whose measure cannot be formed.
struct Unmeasured {
    SubjectKey key;
    std::string reason;
    model::Held held = model::Held::no;  // no: there is nothing to measure; else it may return
};

class Reach;

// Visits the subjects of one kind that a counterparty belongs to.
void each_subject(model::Name const& name, model::GradeScale const& grades, SubjectKind kind,
                  auto&& visit) {
    switch (kind) {
        case SubjectKind::connected_group:
            for (auto const& group : name.groups) visit(std::string_view{group});
            return;
        case SubjectKind::sector:
            return visit(std::string_view{name.sector});
        case SubjectKind::country:
            return visit(std::string_view{name.country});
        case SubjectKind::grade:
            return visit(grades.name(name.grade));
        case SubjectKind::segment:
            return visit(std::string_view{name.segment});
        case SubjectKind::portfolio:
            return visit(std::string_view{"portfolio"});
        default:
            return visit(std::string_view{name.counterparty_id});
    }
}

// What of a usage table is to be written.
struct Differences {
    std::vector<Usage> written;    // new, or other than before; by key
    std::vector<SubjectKey> gone;  // no longer measured; by key
};

struct Checks {
    std::vector<Usage> usages;           // by key
    std::vector<Unmeasured> unmeasured;  // by key
    // Exposures of unknown counterparties could belong to any set: no set is believed downward.
    model::Held sets_held = model::Held::no;

    [[nodiscard]] Usage const* find(SubjectKey const& key) const;
    // Whether a subject without usage may be missing only because rows are set aside.
    [[nodiscard]] model::Held held(SubjectKey const& key) const;

    // What `seen`, which covers a reach, says otherwise than these checks; and these checks with
    // all of it taken in.
    [[nodiscard]] Differences differences(Checks const& seen, Reach const& reach) const;
    void take(Checks seen, Reach const& reach, Differences differences);
};

// One book with its figures, as limits see it: the names, their sets and the totals, each formed
// when it is first asked for.
class View {
public:
    using Names = std::span<std::shared_ptr<model::Name const> const>;  // by counterparty_id
    using Members = std::span<std::uint32_t const>;

    // `errors` gives the contributions' errors; without it they are taken as exact. What is passed
    // must outlive the view, but for `before`: the view of a book with much in common, from which
    // facts and sets are taken over where no name moved.
    View(Names names, Names unknown, std::span<model::NameFigures const> figures,
         model::Figures const* errors, model::Shared const& shared, model::Settings const& settings,
         model::Day day, View const* before = nullptr);

    // Every subject of every limit, and what a turn reaches of them.
    [[nodiscard]] Checks check(Limits const& limits) const;
    [[nodiscard]] Checks check(Reach const& reach) const;

    // One subject of one limit; nothing where it is out of scope or cannot be measured.
    [[nodiscard]] std::optional<Usage> usage(Limit const& limit, SubjectKind kind,
                                             std::string_view subject) const;

    [[nodiscard]] Names names() const { return names_; }
    [[nodiscard]] Names unknown() const { return unknown_; }
    [[nodiscard]] model::GradeScale const& grades() const { return settings_.grades; }
    [[nodiscard]] Members members(SubjectKind kind, std::string_view subject) const;
    [[nodiscard]] double total(Measure measure) const;  // of the whole book; a measure in money
    [[nodiscard]] double defaulted_loss() const;        // of the names in default
    [[nodiscard]] model::Held sets_held() const;        // by exposures of unknown counterparties
    [[nodiscard]] model::Held anything_held() const;    // by any counterparty

private:
    struct Hash {
        using is_transparent = void;  // NOLINT(readability-identifier-naming): the standard's name
        std::size_t operator()(std::string_view text) const {
            return std::hash<std::string_view>{}(text);
        }
    };
    using Sets = std::unordered_map<std::string, std::vector<std::uint32_t>, Hash, std::equal_to<>>;

    struct LevelValue {
        std::optional<double> value{};
        double portfolio_share = 0.0;
        model::Held held = model::Held::no;
        bool total_is_empty = false;
    };

    // What sums over many names need of each, side by side: the names themselves lie far apart.
    struct Facts {
        explicit Facts(model::Name const& name);
        model::Money exposure_at_default;
        model::Money commitment;
        model::Grade grade;
        model::Held held;
        bool in_a_group;
    };

    void take_over_sets(View const& before);
    [[nodiscard]] Sets const& sets(SubjectKind kind) const;
    [[nodiscard]] std::vector<std::string_view> subjects(SubjectKind kind) const;
    [[nodiscard]] bool in_scope(Selector const& selector, model::Name const& name) const;
    [[nodiscard]] Members scoped(Limit const& limit, SubjectKind kind, std::string_view subject,
                                 Members members, std::vector<std::uint32_t>& room) const;
    [[nodiscard]] std::optional<double> concentration(Members members, SubjectKind across) const;
    [[nodiscard]] std::variant<Usage, Unmeasured> measure(Limit const& limit, SubjectKind kind,
                                                          std::string_view subject,
                                                          Members members) const;
    [[nodiscard]] std::optional<double> observed(Measure measure, SubjectKind across,
                                                 SubjectKind kind, Members members) const;
    [[nodiscard]] std::string_view code(SubjectKind fact, SubjectKind kind,
                                        std::string_view subject, Members members) const;
    [[nodiscard]] LevelValue level(LevelRule const& rule, Limit const& limit, SubjectKind kind,
                                   std::string_view subject, Members members) const;
    [[nodiscard]] model::Held held(Limit const& limit, SubjectKind kind, std::string_view subject,
                                   Members members) const;

    Names names_;
    Names unknown_;
    std::span<model::NameFigures const> figures_;
    model::Figures const* errors_;
    model::Shared const& shared_;
    model::Settings const& settings_;
    model::Day day_;
    std::vector<Facts> facts_;
    std::vector<std::uint32_t> everyone_;
    mutable std::map<SubjectKind, std::shared_ptr<Sets const>> sets_;
    mutable std::map<Measure, double> totals_;
    mutable std::optional<model::Held> anything_held_;
};

// Which subjects of which limits a turn holds: no other place decides it.
class Reach {
public:
    // A whole pass: every subject of every limit.
    explicit Reach(Limits const& limits);
    // What can be told without one, where nothing but names differs between two books: of the
    // limits on other measures than contributions, the subjects those names are in, and every
    // subject where that moves what all of them are held against.
    Reach(Limits const& limits, View const& before, View const& now);

    [[nodiscard]] bool holds(SubjectKey const& key) const;
    [[nodiscard]] bool is_whole() const { return whole_; }

    struct OfLimit {
        Limit const* limit;
        bool all;  // its subjects; else the touched ones
    };
    [[nodiscard]] std::span<OfLimit const> limits() const { return limits_; }  // by limit_id
    [[nodiscard]] std::set<std::string, std::less<>> const& touched(SubjectKind kind) const;

private:
    std::vector<OfLimit> limits_;
    bool whole_;
    std::map<SubjectKind, std::set<std::string, std::less<>>> touched_;
};

// Visits every counterparty of either book, by counterparty_id, with its place in each; nothing
// where it is not there. What changes did not touch is one object in both.
void each_pair(View::Names before, View::Names now, auto&& visit) {
    using Place = std::optional<std::uint32_t>;
    for (std::uint32_t b = 0, n = 0; b < before.size() || n < now.size();) {
        auto const order = b == before.size() ? 1
                           : n == now.size()  ? -1
                           : before[b] == now[n]
                               ? 0
                               : before[b]->counterparty_id.compare(now[n]->counterparty_id);
        Place in_before;
        Place in_now;
        if (order <= 0) in_before = b++;
        if (order >= 0) in_now = n++;
        visit(in_before, in_now);
    }
}

// The kinds of subjects as they are written, and those a limit holds for.
inline constexpr std::array subject_kinds{
    SubjectKind::name,  SubjectKind::connected_group, SubjectKind::sector,   SubjectKind::country,
    SubjectKind::grade, SubjectKind::segment,         SubjectKind::portfolio};
std::span<SubjectKind const> kinds_of(Limit const& limit);

// Whether a level of the limit is a share of the portfolio's total.
bool is_held_against_portfolio(Limit const& limit);

// The sum of squared shares of exposure at default across units, 0 to 1; groups that share a member
// count as one unit. Nothing for a set without exposure.
// Source: Herfindahl (1950), Concentration in the steel industry; Hirschman (1964), The paternity
// of an index, American Economic Review 54(5).
std::optional<double> concentration_index(View::Names names, View::Members members,
                                          SubjectKind across);

}  // namespace alerts
