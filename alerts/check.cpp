#include "alerts/check.hpp"

#include <algorithm>
#include <cmath>
#include <map>
#include <numeric>

namespace alerts {
namespace {

using model::Held;
using model::Name;

constexpr bool is_contribution(Measure measure) {
    return measure == Measure::var_contribution || measure == Measure::es_contribution;
}

constexpr bool is_set(SubjectKind kind) {
    return kind != SubjectKind::name && kind != SubjectKind::connected_group;
}

model::Contribution contribution(Measure measure) {
    return measure == Measure::var_contribution ? model::Contribution::var
                                                : model::Contribution::es;
}

// Disjoint sets over 0 … n − 1, by path halving.
class Partition {
public:
    explicit Partition(std::size_t size) : parent_(size) {
        std::iota(parent_.begin(), parent_.end(), std::size_t{0});
    }
    std::size_t root(std::size_t i) {
        while (parent_[i] != i) i = parent_[i] = parent_[parent_[i]];
        return i;
    }
    void join(std::size_t a, std::size_t b) { parent_[root(a)] = root(b); }

private:
    std::vector<std::size_t> parent_;
};

}  // namespace

std::optional<Standing> Usage::standing() const {
    if (!breach_level) return std::nullopt;
    if (over(*breach_level)) return Standing::breach;
    if (warning_level && over(*warning_level)) return Standing::warning;
    double const first = warning_level.value_or(*breach_level);
    bool const near = std::abs(observed - first) <= 3.0 * observed_error;
    return observed_error > 0.0 && near ? Standing::at_level : Standing::within;
}

std::optional<double> Usage::headroom() const {
    if (!breach_level) return std::nullopt;
    return std::max(*breach_level - observed, 0.0);
}

Usage const* Checks::find(SubjectKey const& key) const {
    auto const found = std::ranges::lower_bound(usages, key, {}, &Usage::key);
    return found != usages.end() && found->key == key ? &*found : nullptr;
}

Held Checks::held(SubjectKey const& key) const {
    auto const [first, last] = std::ranges::equal_range(unmeasured, key, {}, &Unmeasured::key);
    Held held = is_set(key.kind) ? sets_held : Held::no;
    for (auto row = first; row != last; ++row) held = std::max(held, row->held);
    return held;
}

std::optional<double> concentration_index(View::Names names, std::span<std::uint32_t const> members,
                                          SubjectKind across) {
    std::map<std::string, double> units;
    double total = 0.0;
    Partition same_unit(members.size());
    if (across == SubjectKind::group_or_name) {
        std::map<std::string_view, std::size_t> first_of_group;
        for (std::size_t i = 0; i < members.size(); ++i)
            for (auto const& group : names[members[i]]->groups)
                same_unit.join(i, first_of_group.try_emplace(group, i).first->second);
    }
    for (std::size_t i = 0; i < members.size(); ++i) {
        auto const& name = *names[members[i]];
        double const exposure = name.exposure_at_default.units();
        auto const& unit = across == SubjectKind::sector ? name.sector
                           : across == SubjectKind::country
                               ? name.country
                               : names[members[same_unit.root(i)]]->counterparty_id;
        units[unit] += exposure;
        total += exposure;
    }
    if (!(total > 0.0)) return std::nullopt;
    double index = 0.0;
    for (auto const& [unit, exposure] : units) index += (exposure / total) * (exposure / total);
    return index;
}

View::View(Names names, Names unknown, std::span<model::NameFigures const> figures,
           model::Figures const* errors, model::Shared const& shared,
           model::Settings const& settings, model::Day day)
    : names_{names},
      unknown_{unknown},
      figures_{figures},
      errors_{errors},
      shared_{shared},
      settings_{settings},
      day_{day} {
    auto& everyone = portfolio_["portfolio"];
    for (std::uint32_t i = 0; i < names_.size(); ++i) {
        Name const& name = *names_[i];
        by_name_[name.counterparty_id].push_back(i);
        for (auto const& group : name.groups) by_group_[group].push_back(i);
        by_sector_[name.sector].push_back(i);
        by_country_[name.country].push_back(i);
        by_grade_[std::string(settings_.grades.name(name.grade))].push_back(i);
        by_segment_[name.segment].push_back(i);
        everyone.push_back(i);
        anything_held_ = std::max(anything_held_, name.held);
    }
    for (auto const& [measure, spelling] : measure_words)
        if (unit_of(measure) == Unit::money)
            totals_[measure] =
                *observed(measure, SubjectKind::name, SubjectKind::portfolio, everyone);
    for (auto const& name : unknown_) {
        bool const exposed = std::ranges::any_of(
            name->set_aside, [](auto const& row) { return row.source_table == "exposure"; });
        if (!exposed) continue;
        sets_held_ = std::max(sets_held_, name->held);
        anything_held_ = std::max(anything_held_, name->held);
    }
}

View::Sets const& View::sets(SubjectKind kind) const {
    switch (kind) {
        case SubjectKind::connected_group:
            return by_group_;
        case SubjectKind::sector:
            return by_sector_;
        case SubjectKind::country:
            return by_country_;
        case SubjectKind::grade:
            return by_grade_;
        case SubjectKind::segment:
            return by_segment_;
        case SubjectKind::portfolio:
            return portfolio_;
        default:
            return by_name_;
    }
}

bool View::in_scope(Limit const& limit, Name const& name) const {
    return std::ranges::all_of(limit.where, [&](Selector const& selector) {
        auto const listed = [&](std::string_view code) {
            return std::ranges::find(selector.codes, code) != selector.codes.end();
        };
        switch (selector.fact) {
            case SubjectKind::segment:
                return listed(name.segment);
            case SubjectKind::sector:
                return listed(name.sector);
            case SubjectKind::country:
                return listed(name.country);
            case SubjectKind::grade:
                return listed(settings_.grades.name(name.grade));
            case SubjectKind::connected_group:
                return std::ranges::any_of(name.groups, listed);
            default:
                return listed(name.counterparty_id);
        }
    });
}

View::Members View::scoped(Limit const& limit, Members const& members) const {
    if (limit.where.empty()) return members;
    Members scoped;
    std::ranges::copy_if(members, std::back_inserter(scoped),
                         [&](std::uint32_t i) { return in_scope(limit, *names_[i]); });
    return scoped;
}

// The measure of a set; nothing where it is not defined: a probability or index without exposure.
std::optional<double> View::observed(Measure measure, SubjectKind across, SubjectKind kind,
                                     Members const& members) const {
    auto const sum = [&](auto figure) {
        double total = 0.0;
        for (auto const i : members) total += figure(i);
        return total;
    };
    auto const money = [&](model::Money Name::*amount) {
        model::Money total;
        for (auto const i : members) total += (*names_[i]).*amount;
        return total.units();
    };
    // Weighted by exposure over the members not in default; a name's own needs no weight.
    auto const probability = [&](model::Probability model::NameFigures::*of) {
        if (kind == SubjectKind::name)
            return std::optional{(figures_[members.front()].*of).value()};
        double weighted = 0.0;
        double weight = 0.0;
        for (auto const i : members) {
            if (names_[i]->grade == settings_.grades.in_default()) continue;
            double const exposure = names_[i]->exposure_at_default.units();
            weighted += exposure * (figures_[i].*of).value();
            weight += exposure;
        }
        return weight > 0.0 ? std::optional{weighted / weight} : std::nullopt;
    };
    switch (measure) {
        case Measure::exposure:
            return money(&Name::exposure_at_default);
        case Measure::commitment:
            return money(&Name::commitment);
        case Measure::expected_loss:
            return sum([&](std::uint32_t i) {
                // What is lost already is in no total of the portfolio.
                bool const lost = kind == SubjectKind::portfolio &&
                                  names_[i]->grade == settings_.grades.in_default();
                return lost ? 0.0 : figures_[i].expected_loss;
            });
        case Measure::var_contribution:
            return sum([&](std::uint32_t i) { return figures_[i].var_contribution; });
        case Measure::es_contribution:
            return sum([&](std::uint32_t i) { return figures_[i].es_contribution; });
        case Measure::default_probability:
            return probability(&model::NameFigures::default_probability);
        case Measure::downgrade_probability:
            return probability(&model::NameFigures::downgrade_probability);
        case Measure::concentration_index:
            return concentration_index(names_, members, across);
    }
    return std::nullopt;
}

// The code by which a subject chooses its level. A group's grade is its worst member's.
std::string View::code(SubjectKind fact, SubjectKind kind, std::string_view subject,
                       Members const& members) const {
    if (fact == kind) return std::string(subject);
    if (fact == SubjectKind::grade) {
        model::Grade worst;
        auto const& all = kind == SubjectKind::connected_group
                              ? by_group_.find(std::string(subject))->second
                              : members;
        for (auto const i : all) worst = std::max(worst, names_[i]->grade);
        return std::string(settings_.grades.name(worst));
    }
    Name const& name = *names_[members.front()];
    return fact == SubjectKind::sector    ? name.sector
           : fact == SubjectKind::country ? name.country
                                          : name.segment;
}

View::LevelValue View::level(LevelRule const& rule, Limit const& limit, SubjectKind kind,
                             std::string_view subject, Members const& members) const {
    auto const found =
        rule.levels.find(rule.by ? code(*rule.by, kind, subject, members) : std::string{});
    // The loader has made sure that a rule is complete or has others.
    Level const& level = found != rule.levels.end() ? found->second : rule.others.value();
    if (auto const* amount = std::get_if<model::Money>(&level)) return {.value = amount->units()};
    if (auto const* plain = std::get_if<double>(&level)) return {.value = *plain};
    auto const& share = std::get<ShareOf>(level);
    if (share.total == Total::portfolio) {
        double const total = totals_.at(limit.measure);
        if (!(total > 0.0)) return {.total_is_empty = true};
        // A total that cannot be believed is a level that cannot.
        return {.value = share.fraction * total,
                .portfolio_share = share.fraction,
                .held = anything_held_};
    }
    auto const capital = model::capital_in_force(shared_, word(total_words, share.total), day_);
    if (!capital) return {.held = Held::level_unknown};
    return {.value = share.fraction * capital->amount, .held = capital->held};
}

// A subject is held by its members and by what cannot be told from them. A contribution depends on
// the whole book, so whatever is held anywhere holds every contribution.
Held View::held(Limit const& limit, SubjectKind kind, std::string_view subject,
                Members const& members) const {
    Held held = is_set(kind) ? sets_held_ : Held::no;
    if (is_contribution(limit.measure)) held = std::max(held, anything_held_);
    for (auto const i : members) held = std::max(held, names_[i]->held);
    if (kind == SubjectKind::connected_group)
        for (auto const& name : unknown_)
            if (std::ranges::find(name->groups, subject) != name->groups.end())
                held = std::max(held, name->held);
    return held;
}

std::variant<Usage, Unmeasured> View::measure(Limit const& limit, SubjectKind kind,
                                              std::string const& subject,
                                              Members const& members) const {
    SubjectKey key{limit.limit_id, kind, subject};
    Held const held = this->held(limit, kind, subject, members);
    auto const observed = this->observed(limit.measure, limit.across, kind, members);
    if (!observed) return Unmeasured{std::move(key), "no exposure to measure", held};
    auto const breach = level(limit.breach_at, limit, kind, subject, members);
    if (breach.total_is_empty)
        return Unmeasured{std::move(key), "no portfolio total to take a share of", anything_held_};
    LevelValue warning;
    if (auto const* share = std::get_if<ShareOfBreach>(&limit.warning_at)) {
        if (breach.value) warning.value = share->fraction * *breach.value;
    } else if (auto const* rule = std::get_if<LevelRule>(&limit.warning_at)) {
        warning = level(*rule, limit, kind, subject, members);
    }
    double error = 0.0;
    if (errors_ != nullptr && is_contribution(limit.measure))
        error = errors_->contribution_error(contribution(limit.measure), members,
                                            breach.portfolio_share);
    return Usage{.key = std::move(key),
                 .measure = limit.measure,
                 .observed = *observed,
                 .observed_error = error,
                 .warning_level = breach.value ? warning.value : std::nullopt,
                 .breach_level = breach.value,
                 .cure_margin = limit.cure_margin,
                 .held = std::max({held, breach.held, warning.held})};
}

std::optional<Usage> View::usage(Limit const& limit, SubjectKind kind,
                                 std::string_view subject) const {
    auto const& all = sets(kind);
    auto const set = all.find(std::string(subject));
    if (set == all.end()) return std::nullopt;
    auto const members = scoped(limit, set->second);
    if (members.empty()) return std::nullopt;
    auto measured = measure(limit, kind, set->first, members);
    auto* const usage = std::get_if<Usage>(&measured);
    return usage != nullptr ? std::optional{std::move(*usage)} : std::nullopt;
}

Checks View::check(Limits const& limits) const {
    Checks checks;
    checks.sets_held = sets_held_;
    auto const add = [&](Limit const& limit, SubjectKind kind, bool only_ungrouped) {
        for (auto const& [subject, all] : sets(kind)) {
            if (only_ungrouped && !names_[all.front()]->groups.empty()) continue;
            auto const members = scoped(limit, all);
            if (members.empty()) continue;
            auto measured = measure(limit, kind, subject, members);
            if (auto* usage = std::get_if<Usage>(&measured))
                checks.usages.push_back(std::move(*usage));
            else
                checks.unmeasured.push_back(std::get<Unmeasured>(std::move(measured)));
        }
        // Whoever rows still point at has not left the limit's scope.
        for (auto const& name : unknown_) {
            auto const& id = name->counterparty_id;
            std::string const reason = "no usable counterparty row";
            if (kind == SubjectKind::name)
                checks.unmeasured.push_back({{limit.limit_id, kind, id}, reason, name->held});
            if (kind == SubjectKind::connected_group)
                for (auto const& group : name->groups)
                    checks.unmeasured.push_back(
                        {{limit.limit_id, kind, group}, reason, name->held});
        }
    };
    for (auto const& limit : limits) {
        if (limit.per == SubjectKind::group_or_name) {
            add(limit, SubjectKind::connected_group, false);
            add(limit, SubjectKind::name, true);
        } else {
            add(limit, limit.per, false);
        }
    }
    std::ranges::sort(checks.usages, {}, &Usage::key);
    std::ranges::sort(checks.unmeasured, {}, &Unmeasured::key);
    return checks;
}

Checks check(model::Book const& book, model::Figures const& figures, Limits const& limits) {
    return View{book.names(),  book.unknown(),   figures.names,   &figures,
                book.shared(), *book.settings(), book.as_of().day}
        .check(limits);
}

}  // namespace alerts
