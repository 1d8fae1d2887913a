#include "model/book.hpp"

#include "model/dependence.hpp"

#include <algorithm>
#include <cctype>
#include <cmath>
#include <span>
#include <stdexcept>
#include <tuple>

namespace model {
namespace {

// Beyond this a single amount is a mistake, not a loan.
constexpr double largest_amount = 1e14;

// The domain of an exchange rate: between any two currencies in use there are fewer zeros.
constexpr double smallest_rate = 1e-7;
constexpr double largest_rate = 1e7;

// Longer codes than this fit no index, and no reader.
constexpr std::size_t longest_code = 200;

// A value as a reason or key shows it: its beginning, cut between characters.
std::string shown(std::string_view text, std::size_t longest) {
    if (text.size() <= longest) return std::string{text};
    while (longest > 0 && (static_cast<unsigned char>(text[longest]) & 0xC0U) == 0x80U) --longest;
    return std::string{text.substr(0, longest)} + "…";
}

std::string key_of(std::initializer_list<std::string_view> parts) {
    std::string key;
    for (auto const part : parts) key += (key.empty() ? "" : "/") + shown(part, longest_code);
    return key;
}

// Codes become subjects; a comma joins two of them, and control characters hide from the reader.
bool is_usable_code(std::string_view code) {
    return !code.empty() && code.size() <= longest_code &&
           (!is_reserved(code) || code == "unknown") && std::ranges::none_of(code, [](char c) {
               return c == ',' || static_cast<unsigned char>(c) < 0x20 || c == 0x7f;
           });
}

// ISO 17442: 18 letters and digits and two check digits, 1 modulo 97 by ISO 7064 with A = 10.
bool is_lei(std::string_view lei) {
    if (lei.size() != 20) return false;
    unsigned remainder = 0;
    for (char const c : lei) {
        if (c >= '0' && c <= '9') {
            remainder = (remainder * 10 + static_cast<unsigned>(c - '0')) % 97;
        } else if (c >= 'A' && c <= 'Z') {
            remainder = (remainder * 100 + static_cast<unsigned>(c - 'A' + 10)) % 97;
        } else {
            return false;
        }
    }
    return remainder == 1 && std::isdigit(static_cast<unsigned char>(lei[18])) != 0 &&
           std::isdigit(static_cast<unsigned char>(lei[19])) != 0;
}

std::string code_or_unknown(std::optional<std::string> const& code) {
    return code && !code->empty() ? *code : "unknown";
}

// Why the counterparty's own row cannot be used; nothing if it can.
std::optional<std::string> fault_of(std::string_view id, CounterpartyRow const& row,
                                    std::string_view sector, std::string_view country) {
    auto const bad = [](std::string_view what) {
        return std::string(what) +
               " is empty, too long, a reserved word, or has a comma or a control character";
    };
    if (!is_usable_code(id)) return bad("counterparty_id");
    if (!is_usable_code(row.segment)) return bad("segment");
    if (!is_usable_code(sector)) return bad("sector");
    if (!is_usable_code(country)) return bad("country of risk");
    return std::nullopt;
}

// The newest row not in the future that is usable; `skipped` sees those newer than it that are not.
template <class Row, class When, class Usable, class Skipped>
Row const* newest(std::vector<Row> const& rows, When not_in_future, Usable usable,
                  Skipped skipped) {
    for (auto row = rows.rbegin(); row != rows.rend(); ++row) {
        if (!not_in_future(*row)) continue;
        if (usable(*row)) return &*row;
        skipped(*row);
    }
    return nullptr;
}

bool is_usable_rate(RateRow const& row) {
    return row.base_per_unit >= smallest_rate && row.base_per_unit <= largest_rate;
}
bool is_usable_capital(CapitalRow const& row) {
    return std::isfinite(row.amount) && row.amount > 0.0 && row.amount < largest_amount;
}

struct RatingInUse {
    Grade grade;
    std::optional<std::string> flag;
};

// The first source whose newest rating is fresh wins. Where none is fresh, the first that has one
// gives the worse of it and unrated_as; `default` never ages. A withdrawn rating is no rating.
RatingInUse rating_in_use(Inputs const& inputs, Settings const& settings, Instant as_of,
                          std::vector<SetAside>& set_aside) {
    std::optional<Grade> old;
    bool withdrawn = false;
    for (auto const& source : settings.rating_sources) {
        auto const* const rating = newest(
            inputs.ratings,
            [&](RatingRow const& row) { return row.source == source && row.rated_at <= as_of.at; },
            [&](RatingRow const& row) {
                return row.grade == "withdrawn" || settings.grades.find(row.grade).has_value();
            },
            [&](RatingRow const& row) {
                set_aside.push_back(
                    {.source_table = "rating",
                     .source_key = key_of({inputs.counterparty_id, row.source, iso(row.rated_at)}),
                     .reason = "grade '" + shown(row.grade, 60) + "' is not of the scale",
                     .amount = std::nullopt});
            });
        if (rating == nullptr) continue;
        if (rating->grade == "withdrawn") {
            withdrawn = true;
            continue;
        }
        auto const grade = *settings.grades.find(rating->grade);
        auto const age = as_of.day - std::chrono::floor<std::chrono::days>(rating->rated_at);
        bool const fresh = age <= std::chrono::days{settings.rating_max_age_days};
        if (fresh || grade == settings.grades.in_default()) return {grade, std::nullopt};
        if (!old) old = grade;
    }
    if (old) return {std::max(*old, settings.unrated_as), "rating_old"};
    return {settings.unrated_as, withdrawn ? "withdrawn" : "unrated"};
}

// An exposure row in base currency.
struct Amounts {
    ExposureRow const* row = nullptr;
    double facility = 0.0;
    double collateral = 0.0;
    double commitment = 0.0;
    double loss_given_default = 0.0;
    RateInForce rate;
    bool matured = false;
};

double conversion_factor_of(ExposureRow const& row, Settings const& settings) {
    if (row.conversion_factor) return *row.conversion_factor;
    auto const& factors = settings.conversion_factor;
    auto found = factors.end();
    if (!row.committed) found = factors.find("uncommitted");
    if (found == factors.end()) found = factors.find(row.product);
    if (found == factors.end()) found = factors.find("others");
    return found == factors.end() ? 1.0 : found->second.value();
}

// Why an exposure row cannot be used; nothing if it can.
std::optional<std::string> fault_of(ExposureRow const& row) {
    auto const in_unit_interval = [](std::optional<double> const& x) {
        return !x || (*x >= 0.0 && *x <= 1.0);
    };
    auto const is_amount = [](double x) { return std::abs(x) < largest_amount; };
    if (!is_amount(row.drawn)) return "drawn is not a number in range";
    if (!is_amount(row.undrawn)) return "undrawn is not a number in range";
    if (!(row.add_on >= 0.0 && is_amount(row.add_on))) return "add_on is not a number >= 0";
    if (!(row.collateral >= 0.0 && is_amount(row.collateral)))
        return "collateral is not a number >= 0";
    if (!in_unit_interval(row.conversion_factor)) return "conversion_factor is not in [0, 1]";
    if (!in_unit_interval(row.loss_given_default)) return "loss_given_default is not in [0, 1]";
    if (row.drawn < 0.0 && !row.netting_set) return "drawn is negative outside a netting set";
    return std::nullopt;
}

Amounts amounts_of(ExposureRow const& row, RateInForce rate, Settings const& settings, Day day) {
    bool const matured = row.maturity && *row.maturity < day;
    double const undrawn = matured ? 0.0 : std::max(0.0, row.undrawn);
    double const to_base = rate.base_per_unit;
    return {
        .row = &row,
        .facility =
            (row.drawn + row.add_on + conversion_factor_of(row, settings) * undrawn) * to_base,
        .collateral = row.collateral * to_base,
        .commitment = (std::max(0.0, row.drawn) + (row.committed ? undrawn : 0.0)) * to_base,
        .loss_given_default = row.loss_given_default.value_or(settings.loss_given_default.value()),
        .rate = rate,
        .matured = matured && row.drawn + row.add_on != 0.0,
    };
}

// Sums of amounts in range; absurdly many of them stay at the largest.
Money rounded(double units) {
    auto const largest = Money::from_units(9.2e15);
    return Money::from_units(units).value_or(*largest);
}

// Adds a netting set's exposure at default, spread over its facilities, to the name.
void add_netting_set(std::span<Amounts const> set, Name& name) {
    double facilities = 0.0;
    double positive = 0.0;
    double collateral = 0.0;
    for (auto const& facility : set) {
        facilities += facility.facility;
        positive += std::max(0.0, facility.facility);
        collateral += facility.collateral;
    }
    Money const exposure = rounded(std::max(0.0, facilities - collateral));
    std::size_t const first = name.facilities.size();
    std::size_t largest = 0;
    Money left = exposure;
    for (std::size_t i = 0; i < set.size(); ++i) {
        double const share = positive > 0.0 ? std::max(0.0, set[i].facility) / positive : 0.0;
        Facility part{.exposure_id = set[i].row->exposure_id,
                      .exposure_at_default = rounded(exposure.units() * share),
                      .loss_given_default = set[i].loss_given_default,
                      .rate_used = set[i].rate.base_per_unit,
                      .flags = {}};
        if (set[i].matured) part.flags.emplace_back("matured");
        if (set[i].rate.held == Held::rate_old) part.flags.emplace_back("rate_old");
        left -= part.exposure_at_default;
        if (set[i].facility > set[largest].facility) largest = i;  // ties: rows come by exposure_id
        name.facilities.push_back(std::move(part));
    }
    name.facilities[first + largest].exposure_at_default += left;
    name.exposure_at_default += exposure;
    for (std::size_t i = first; i < name.facilities.size(); ++i)
        name.loss_at_default +=
            name.facilities[i].exposure_at_default.units() * name.facilities[i].loss_given_default;
}

// The rows that can be used, in base currency; the others are set aside in the name.
std::vector<Amounts> usable_exposures(Inputs const& inputs, Shared const& shared,
                                      Settings const& settings, Day day, Name& name) {
    std::vector<Amounts> usable;
    for (auto const& row : inputs.exposures) {
        auto const rate = rate_in_force(shared, settings, row.currency, day);
        auto fault = fault_of(row);
        Held held = Held::row_set_aside;
        if (!fault && !rate) {
            fault = "no exchange rate for " + shown(row.currency, 60);
            held = Held::rate_missing;
        }
        std::optional<Amounts> amounts;
        if (rate) {
            amounts = amounts_of(row, *rate, settings, day);
            double const size =
                std::max({std::abs(amounts->facility), amounts->collateral, amounts->commitment});
            if (!fault && !(size < largest_amount))
                fault = "the amount in base currency is out of range";
        }
        if (!fault && !name.known) fault = "no counterparty " + shown(inputs.counterparty_id, 60);
        if (fault) {
            std::optional<double> amount;
            if (amounts && std::isfinite(amounts->facility)) amount = amounts->facility;
            name.set_aside.push_back({"exposure", key_of({row.exposure_id}), *fault, amount, held});
            continue;
        }
        name.held = std::max(name.held, rate->held);
        usable.push_back(*amounts);
    }
    return usable;
}

void add_exposures(std::vector<Amounts> usable, Name& name) {
    // A facility without a netting set is its own.
    auto const set_of = [](Amounts const& a) {
        return a.row->netting_set ? std::tuple(1, std::string_view{*a.row->netting_set})
                                  : std::tuple(0, std::string_view{a.row->exposure_id});
    };
    std::ranges::sort(usable, [&](Amounts const& a, Amounts const& b) {
        return std::tuple(set_of(a), std::string_view{a.row->exposure_id}) <
               std::tuple(set_of(b), std::string_view{b.row->exposure_id});
    });
    double commitment = 0.0;
    for (auto first = usable.begin(); first != usable.end();) {
        auto const last = std::find_if(
            first, usable.end(), [&](Amounts const& a) { return set_of(a) != set_of(*first); });
        add_netting_set({first, last}, name);
        for (; first != last; ++first) commitment += first->commitment;
    }
    name.commitment = rounded(commitment);
    std::ranges::sort(name.facilities, {}, &Facility::exposure_id);
}

void add_memberships(Inputs const& inputs, Day day, Name& name) {
    for (auto const& row : inputs.memberships) {
        if (row.valid_from > day || (row.valid_until && *row.valid_until < day)) continue;
        bool const usable = is_usable_code(row.group_id);
        if (usable) name.groups.push_back(row.group_id);
        if (usable && name.known) continue;
        name.set_aside.push_back(
            {.source_table = "group_member",
             .source_key = key_of({row.group_id, inputs.counterparty_id, iso(row.valid_from)}),
             .reason =
                 usable
                     ? "no counterparty " + shown(inputs.counterparty_id, 60)
                     : "group_id is empty, too long, a reserved word, or has a comma or a control "
                       "character",
             .amount = std::nullopt});
    }
    std::ranges::sort(name.groups);
    auto const repeated = std::ranges::unique(name.groups);
    name.groups.erase(repeated.begin(), repeated.end());
}

// Rows that point at no counterparty: nothing of them enters the book, all of it is shown.
void set_ratings_aside(Inputs const& inputs, Name& name) {
    for (auto const& row : inputs.ratings)
        name.set_aside.push_back(
            {.source_table = "rating",
             .source_key = key_of({inputs.counterparty_id, row.source, iso(row.rated_at)}),
             .reason = "no counterparty " + shown(inputs.counterparty_id, 60),
             .amount = std::nullopt});
}

}  // namespace

std::optional<RateInForce> rate_in_force(Shared const& shared, Settings const& settings,
                                         std::string_view currency, Day day) {
    if (currency == settings.base_currency) return RateInForce{};
    auto const found = shared.rates.find(currency);
    if (found == shared.rates.end()) return std::nullopt;
    Held held = Held::no;
    auto const* const row = newest(
        found->second, [&](RateRow const& rate) { return rate.quoted_on <= day; }, is_usable_rate,
        [&](RateRow const&) { held = Held::row_set_aside; });
    if (row == nullptr) return std::nullopt;
    if (day - row->quoted_on > std::chrono::days{settings.fx_max_age_days})
        held = std::max(held, Held::rate_old);
    return RateInForce{row->base_per_unit, held};
}

std::optional<CapitalInForce> capital_in_force(Shared const& shared, std::string_view kind,
                                               Day day) {
    auto const found = shared.capital.find(kind);
    if (found == shared.capital.end()) return std::nullopt;
    Held held = Held::no;
    auto const* const row = newest(
        found->second, [&](CapitalRow const& capital) { return capital.as_of <= day; },
        is_usable_capital, [&](CapitalRow const&) { held = Held::row_set_aside; });
    if (row == nullptr) return std::nullopt;
    return CapitalInForce{row->amount, held};
}

Name derive(Inputs const& inputs, Shared const& shared, Settings const& settings, Instant as_of) {
    Name name;
    name.counterparty_id = inputs.counterparty_id;
    name.known = false;
    if (inputs.row) {
        auto const& row = *inputs.row;
        name.legal_name = row.legal_name;
        name.segment = row.segment;
        name.sector = code_or_unknown(row.sector);
        name.country = code_or_unknown(row.country_of_risk ? row.country_of_risk : row.country);
        if (auto fault = fault_of(inputs.counterparty_id, row, name.sector, name.country)) {
            name.set_aside.push_back(
                {"counterparty", key_of({inputs.counterparty_id}), *fault, std::nullopt});
        } else {
            name.known = true;
        }
        if (row.lei && !is_lei(*row.lei)) name.flags.emplace_back("lei_invalid");
        if (row.asset_correlation) {
            if (*row.asset_correlation >= 0.0 && *row.asset_correlation <= 0.99) {
                name.asset_correlation = row.asset_correlation;
            } else {
                name.flags.emplace_back("asset_correlation_invalid");
            }
        }
    }
    add_memberships(inputs, as_of.day, name);
    add_exposures(usable_exposures(inputs, shared, settings, as_of.day, name), name);
    if (name.known) {
        auto rating = rating_in_use(inputs, settings, as_of, name.set_aside);
        name.grade = rating.grade;
        if (rating.flag) name.flags.push_back(*std::move(rating.flag));
        if (!has_index(settings, name.sector, name.country)) name.flags.emplace_back("no_index");
    } else {
        name.grade = settings.unrated_as;
        set_ratings_aside(inputs, name);
    }
    for (auto const& row : name.set_aside) name.held = std::max(name.held, row.held);
    return name;
}

bool Book::apply(Changes changes, std::shared_ptr<Settings const> settings, Instant as_of) {
    Digest const digest_before = digest();
    bool const all =
        changes.whole || changes.shared || settings != settings_ || as_of.day != as_of_.day;
    auto const begins_to_rule = [&](RatingRow const& row) {
        return row.rated_at > as_of_.at && row.rated_at <= as_of.at;
    };
    bool different = settings != settings_ || as_of.day != as_of_.day;
    settings_ = std::move(settings);
    if (changes.shared)
        shared_ = std::make_shared<Shared const>(*std::exchange(changes.shared, std::nullopt));
    if (changes.whole) entries_.clear();

    std::ranges::sort(changes.counterparties, {}, &Inputs::counterparty_id);
    std::vector<Entry> merged;
    merged.reserve(entries_.size() + changes.counterparties.size());
    auto old = entries_.begin();
    auto const keep = [&](Entry& entry) {
        if (std::ranges::any_of(entry.inputs->ratings, begins_to_rule)) {
            entry.name = nullptr;
            different = true;
        }
        merged.push_back(std::move(entry));
    };
    for (auto& inputs : changes.counterparties) {
        for (; old != entries_.end() && old->inputs->counterparty_id < inputs.counterparty_id;
             ++old)
            keep(*old);
        if (old != entries_.end() && old->inputs->counterparty_id == inputs.counterparty_id) ++old;
        if (!inputs.row && inputs.ratings.empty() && inputs.exposures.empty() &&
            inputs.memberships.empty())
            continue;
        std::ranges::sort(inputs.ratings, {}, &RatingRow::rated_at);
        std::ranges::sort(inputs.exposures, {}, &ExposureRow::exposure_id);
        merged.push_back({std::make_shared<Inputs const>(std::move(inputs)), nullptr});
    }
    for (; old != entries_.end(); ++old) keep(*old);

    entries_ = std::move(merged);
    as_of_ = as_of;
    names_.clear();
    unknown_.clear();
    for (auto& entry : entries_) {
        if (all || !entry.name)
            entry.name =
                std::make_shared<Name const>(derive(*entry.inputs, *shared_, *settings_, as_of_));
        (entry.name->known ? names_ : unknown_).push_back(entry.name);
    }
    return different || !(digest() == digest_before);
}

Digest Book::digest() const {
    Digest sum = shared_->digest;
    for (auto const& entry : entries_) sum += entry.inputs->digest;
    return sum;
}

std::vector<SetAside> Book::set_aside() const {
    std::vector<SetAside> rows;
    for (auto const& entry : entries_)
        rows.insert(rows.end(), entry.name->set_aside.begin(), entry.name->set_aside.end());
    for (auto const& [currency, rates] : shared_->rates)
        newest(
            rates, [&](RateRow const& row) { return row.quoted_on <= as_of_.day; }, is_usable_rate,
            [&, &currency = currency](RateRow const& row) {
                rows.push_back({"fx_rate", key_of({currency, iso(row.quoted_on)}),
                                "base_per_unit is not a number from 1e-7 to 1e7", std::nullopt});
            });
    for (auto const& [kind, amounts] : shared_->capital)
        newest(
            amounts, [&](CapitalRow const& row) { return row.as_of <= as_of_.day; },
            is_usable_capital,
            [&, &kind = kind](CapitalRow const& row) {
                rows.push_back({"capital", kind + "/" + iso(row.as_of),
                                "amount is not a number above 0 and in range", std::nullopt});
            });
    return rows;
}

Inputs const* Book::inputs(std::string_view counterparty_id) const {
    auto const found = std::ranges::lower_bound(entries_, counterparty_id, {}, [](Entry const& e) {
        return std::string_view{e.inputs->counterparty_id};
    });
    bool const here = found != entries_.end() && found->inputs->counterparty_id == counterparty_id;
    return here ? found->inputs.get() : nullptr;
}

Name const* Book::find(std::string_view counterparty_id) const {
    auto const found = std::ranges::lower_bound(names_, counterparty_id, {}, [](auto const& name) {
        return std::string_view{name->counterparty_id};
    });
    bool const here = found != names_.end() && (*found)->counterparty_id == counterparty_id;
    return here ? found->get() : nullptr;
}

std::optional<Time> Book::due() const {
    std::optional<Time> next;
    for (auto const& entry : entries_)
        for (auto const& rating : entry.inputs->ratings)
            if (rating.rated_at > as_of_.at && (!next || rating.rated_at < *next))
                next = rating.rated_at;
    return next;
}

}  // namespace model
