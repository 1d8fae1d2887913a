#pragma once

#include "model/settings.hpp"
#include "model/units.hpp"

#include <map>
#include <memory>
#include <optional>
#include <set>
#include <string>
#include <vector>

// The book: the input tables as values, and the counterparties they add up to. Persistent: a copy
// is a handful of pointers a name, shares what did not change, and stays as it was.

namespace model {

// Why a figure must not be believed downward. Ordered: the largest is the one shown.
enum class Held { no, rate_old, rate_missing, row_set_aside, level_unknown };

// An input row that cannot be used.
struct SetAside {
    std::string source_table;
    std::string source_key;
    std::string reason;
    std::optional<double> amount;  // base currency, where it can be told
    Held held = Held::row_set_aside;
    friend bool operator==(SetAside const&, SetAside const&) = default;
};

// Rows as the database gives them: nothing about them is trusted but their types.
struct CounterpartyRow {
    std::string legal_name;
    std::string segment;
    std::optional<std::string> sector;
    std::optional<std::string> country;
    std::optional<std::string> country_of_risk;
    std::optional<std::string> lei;
    std::optional<double> asset_correlation;
};

struct RatingRow {
    std::string source;
    Time rated_at;
    std::string grade;
};

struct ExposureRow {
    std::string exposure_id;
    std::string product;
    std::string currency;
    double drawn = 0.0;
    double undrawn = 0.0;
    std::optional<double> conversion_factor;
    bool committed = true;
    double add_on = 0.0;
    double collateral = 0.0;
    std::optional<std::string> netting_set;
    std::optional<double> loss_given_default;
    std::optional<Day> maturity;
};

struct MemberRow {
    std::string group_id;
    Day valid_from;
    std::optional<Day> valid_until;  // holds through the day
};

// Everything the tables say of one counterparty, whether or not it has a row of its own.
struct Inputs {
    std::string counterparty_id;
    std::optional<CounterpartyRow> row;
    std::vector<RatingRow> ratings;      // in a book: by rated_at
    std::vector<ExposureRow> exposures;  // in a book: by exposure_id
    std::vector<MemberRow> memberships;
    Digest digest;  // of all these rows
};

struct RateRow {
    Day quoted_on;
    double base_per_unit = 0.0;
};

struct CapitalRow {
    Day as_of;
    double amount = 0.0;
};

// What all counterparties share.
struct Shared {
    std::map<std::string, std::vector<RateRow>, std::less<>> rates;       // by currency, by day
    std::map<std::string, std::vector<CapitalRow>, std::less<>> capital;  // by kind, by day
    std::map<std::string, std::string, std::less<>> group_names;          // by group_id
    Digest digest;
};

// A facility's part of its counterparty's exposure at default.
struct Facility {
    std::string exposure_id;
    Money exposure_at_default;
    double loss_given_default = 0.0;  // fraction
    double rate_used = 1.0;           // base currency per unit of the row's currency
    std::vector<std::string> flags;
};

// A counterparty as the model and the limits see it.
struct Name {
    std::string counterparty_id;
    std::string legal_name;
    std::string segment;
    std::string sector;                       // "unknown" where the row gives none
    std::string country;                      // of risk
    std::vector<std::string> groups;          // ids, sorted
    Grade grade;                              // the one used: after unrated_as and age
    std::optional<double> asset_correlation;  // the counterparty's own, in [0, 0.99]
    std::vector<std::string> flags;
    Money exposure_at_default;
    Money commitment;
    double loss_at_default = 0.0;  // sum of EAD x LGD over facilities, base currency
    Held held = Held::no;
    std::vector<Facility> facilities;  // by exposure_id
    std::vector<SetAside> set_aside;   // rows of this counterparty
    bool known = true;  // false: rows point at it, but it has no (usable) row of its own
};

// What one counterparty's rows add up to at an instant. Pure; the one place that judges a row.
//
//     facility amount  (drawn + add_on + conversion_factor x max(0, undrawn)) x rate
//     netting set      max(0, sum of facility amounts - sum of collateral), rounded once
//     name             sum over its netting sets; a facility without one is its own set
//
// A set's exposure is spread over its facilities in proportion to max(0, facility amount), what
// rounding leaves to the largest (ties: the smallest exposure_id).
Name derive(Inputs const& inputs, Shared const& shared, Settings const& settings, Instant as_of);

// A rate as it rules at a day: the newest not in the future. The base currency is 1.
struct RateInForce {
    double base_per_unit = 1.0;
    Held held = Held::no;  // rate_old, or row_set_aside where a newer row is not usable
};
std::optional<RateInForce> rate_in_force(Shared const& shared, Settings const& settings,
                                         std::string_view currency, Day day);

// The firm's capital of a kind as it rules at a day: the newest not in the future.
struct CapitalInForce {
    double amount = 0.0;   // base currency, > 0
    Held held = Held::no;  // row_set_aside where a newer row is not usable
};
std::optional<CapitalInForce> capital_in_force(Shared const& shared, std::string_view kind,
                                               Day day);

class Book {
public:
    // What a turn read. `whole` replaces everything; otherwise only what is listed is replaced, and
    // a counterparty listed without any row is gone.
    struct Changes {
        bool whole = false;
        std::vector<Inputs> counterparties;
        std::optional<Shared> shared;
    };

    // Takes the changes, the rules and the instant together; derives anew only what they touch.
    // Returns whether anything a figure or a limit depends on may be different.
    bool apply(Changes changes, std::shared_ptr<Settings const> settings, Instant as_of);

    // The counterparties, by counterparty_id.
    [[nodiscard]] std::vector<std::shared_ptr<Name const>> const& names() const { return names_; }
    // Those that rows point at, but that are no counterparties; by counterparty_id.
    [[nodiscard]] std::vector<std::shared_ptr<Name const>> const& unknown() const {
        return unknown_;
    }
    [[nodiscard]] Shared const& shared() const { return *shared_; }
    [[nodiscard]] std::shared_ptr<Settings const> const& settings() const { return settings_; }
    [[nodiscard]] Instant as_of() const { return as_of_; }
    [[nodiscard]] Digest digest() const;
    [[nodiscard]] std::vector<SetAside> set_aside() const;
    [[nodiscard]] Name const* find(std::string_view counterparty_id) const;  // known ones
    [[nodiscard]] Inputs const* inputs(std::string_view counterparty_id) const;

    // The next instant at which a rating dated in the future begins to rule.
    [[nodiscard]] std::optional<Time> due() const;

private:
    struct Entry {
        std::shared_ptr<Inputs const> inputs;
        std::shared_ptr<Name const> name;  // null until derived
    };

    std::vector<Entry> entries_;  // by counterparty_id
    std::shared_ptr<Shared const> shared_ = std::make_shared<Shared const>();
    std::shared_ptr<Settings const> settings_;
    Instant as_of_;
    std::vector<std::shared_ptr<Name const>> names_;
    std::vector<std::shared_ptr<Name const>> unknown_;
};

}  // namespace model
