#include "alerts/check.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <iterator>
#include <numeric>

namespace alerts {
namespace {

using model::Held;
using model::Name;

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

// What makes a name one unit with others.
void each_unit(Name const& name, SubjectKind across, auto&& visit) {
    if (across == SubjectKind::sector) visit(std::string_view{name.sector});
    if (across == SubjectKind::country) visit(std::string_view{name.country});
    if (across == SubjectKind::group_or_name)
        for (auto const& group : name.groups) visit(std::string_view{group});
}

std::optional<double> concentration_of(std::size_t count, auto&& exposure, auto&& each_unit_of) {
    Partition units(count);
    std::unordered_map<std::string_view, std::size_t> first;  // member of a unit
    for (std::size_t i = 0; i < count; ++i)
        each_unit_of(i, [&](std::string_view unit) {
            units.join(i, first.try_emplace(unit, i).first->second);
        });
    std::vector<double> exposures(count, 0.0);  // by the unit's root
    double total = 0.0;
    for (std::size_t i = 0; i < count; ++i) {
        exposures[units.root(i)] += exposure(i);
        total += exposure(i);
    }
    if (!(total > 0.0)) return std::nullopt;
    double index = 0.0;
    for (double const of_unit : exposures) index += (of_unit / total) * (of_unit / total);
    return index;
}

bool has_share_of_portfolio(LevelRule const& rule) {
    auto const is = [](Level const& level) {
        auto const* const share = std::get_if<ShareOf>(&level);
        return share != nullptr && share->total == Total::portfolio;
    };
    return (rule.others && is(*rule.others)) ||
           std::ranges::any_of(rule.levels, is, [](auto const& entry) { return entry.second; });
}

std::string const& id_of(Reach::OfLimit const& of) {
    return of.limit->limit_id;
}

}  // namespace

std::span<SubjectKind const> kinds_of(Limit const& limit) {
    static constexpr std::array all{SubjectKind::name,     SubjectKind::connected_group,
                                    SubjectKind::sector,   SubjectKind::country,
                                    SubjectKind::grade,    SubjectKind::segment,
                                    SubjectKind::portfolio};
    if (limit.per == SubjectKind::group_or_name) return std::span{all}.first(2);
    return std::span{std::ranges::find(all, limit.per), 1};
}

bool is_held_against_portfolio(Limit const& limit) {
    auto const* const warning = std::get_if<LevelRule>(&limit.warning_at);
    return has_share_of_portfolio(limit.breach_at) ||
           (warning != nullptr && has_share_of_portfolio(*warning));
}

Reach::Reach(Limits const& limits) : whole_{true} {
    for (auto const& limit : limits) limits_.push_back({&limit, true});
    std::ranges::sort(limits_, {}, id_of);
}

Reach::Reach(Limits const& limits, View const& before, View const& now) : Reach{limits} {
    whole_ = false;
    std::erase_if(limits_, [](OfLimit const& of) { return is_contribution(of.limit->measure); });
    bool const sets_moved = before.sets_held() != now.sets_held();
    for (auto& [limit, all] : limits_)
        all = sets_moved || (is_held_against_portfolio(*limit) &&
                             (before.anything_held() != now.anything_held() ||
                              before.total(limit->measure) != now.total(limit->measure)));
    auto const add = [&](Name const& name, model::GradeScale const& grades) {
        for (auto const kind : subject_kinds)
            each_subject(name, grades, kind,
                         [&](std::string_view subject) { touched_[kind].emplace(subject); });
    };
    auto const add_moved = [&](View::Names old, View::Names fresh) {
        each_pair(old, fresh, [&](auto in_old, auto in_fresh) {
            if (in_old && in_fresh && old[*in_old] == fresh[*in_fresh]) return;
            if (in_old) add(*old[*in_old], before.grades());
            if (in_fresh) add(*fresh[*in_fresh], now.grades());
        });
    };
    add_moved(before.names(), now.names());
    add_moved(before.unknown(), now.unknown());
}

bool Reach::holds(SubjectKey const& key) const {
    if (whole_) return true;
    auto const of = std::ranges::find(limits_, key.limit_id, id_of);
    return of != limits_.end() && (of->all || touched(key.kind).contains(key.subject));
}

std::set<std::string, std::less<>> const& Reach::touched(SubjectKind kind) const {
    static std::set<std::string, std::less<>> const none;
    auto const found = touched_.find(kind);
    return found != touched_.end() ? found->second : none;
}

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

Differences Checks::differences(Checks const& seen, Reach const& reach) const {
    std::vector<Usage const*> old;  // of the subjects reached, by key
    for (auto const& [limit, all] : reach.limits()) {
        if (all) {
            auto const of_limit = std::ranges::equal_range(
                usages, limit->limit_id, {},
                [](Usage const& usage) -> auto const& { return usage.key.limit_id; });
            for (auto const& usage : of_limit) old.push_back(&usage);
            continue;
        }
        for (auto const kind : kinds_of(*limit))
            for (auto const& subject : reach.touched(kind))
                if (auto const* const usage = find({limit->limit_id, kind, subject}))
                    old.push_back(usage);
    }
    Differences differences;
    auto before = old.begin();
    for (auto const& usage : seen.usages) {
        for (; before != old.end() && (*before)->key < usage.key; ++before)
            differences.gone.push_back((*before)->key);
        bool const known = before != old.end() && (*before)->key == usage.key;
        if (!known || !(**before == usage)) differences.written.push_back(usage);
        if (known) ++before;
    }
    for (; before != old.end(); ++before) differences.gone.push_back((*before)->key);
    return differences;
}

void Checks::take(Checks seen, Reach const& reach, Differences differences) {
    std::vector<Usage> fresh;
    for (auto& usage : differences.written) {
        auto const at = std::ranges::lower_bound(usages, usage.key, {}, &Usage::key);
        if (at != usages.end() && at->key == usage.key)
            *at = std::move(usage);
        else
            fresh.push_back(std::move(usage));
    }
    if (!fresh.empty() || !differences.gone.empty()) {
        std::erase_if(usages, [&](Usage const& usage) {
            return std::ranges::binary_search(differences.gone, usage.key);
        });
        auto const old = static_cast<std::ptrdiff_t>(usages.size());
        std::ranges::move(fresh, std::back_inserter(usages));
        std::ranges::inplace_merge(usages, usages.begin() + old, {}, &Usage::key);
    }
    std::erase_if(unmeasured, [&](Unmeasured const& row) { return reach.holds(row.key); });
    std::ranges::move(seen.unmeasured, std::back_inserter(unmeasured));
    std::ranges::sort(unmeasured, {}, &Unmeasured::key);
    sets_held = seen.sets_held;
}

std::optional<double> concentration_index(View::Names names, View::Members members,
                                          SubjectKind across) {
    return concentration_of(
        members.size(),
        [&](std::size_t i) { return names[members[i]]->exposure_at_default.units(); },
        [&](std::size_t i, auto&& visit) { each_unit(*names[members[i]], across, visit); });
}

View::View(Names names, Names unknown, std::span<model::NameFigures const> figures,
           model::Figures const* errors, model::Shared const& shared,
           model::Settings const& settings, model::Day day, View const* before)
    : names_{names},
      unknown_{unknown},
      figures_{figures},
      errors_{errors},
      shared_{shared},
      settings_{settings},
      day_{day},
      everyone_(names.size()) {
    std::iota(everyone_.begin(), everyone_.end(), 0U);
    facts_.reserve(names.size());
    each_pair(before != nullptr ? before->names_ : Names{}, names_, [&](auto b, auto n) {
        if (!n) return;
        if (b && before->names_[*b] == names_[*n])
            facts_.push_back(before->facts_[*b]);
        else
            facts_.emplace_back(*names_[*n]);
    });
    if (before != nullptr) take_over_sets(*before);
}

View::Facts::Facts(Name const& name)
    : exposure_at_default{name.exposure_at_default},
      commitment{name.commitment},
      grade{name.grade},
      held{name.held},
      in_a_group{!name.groups.empty()} {}

void View::take_over_sets(View const& before) {
    auto const subjects = [](SubjectKind kind, Name const& name, model::GradeScale const& grades) {
        std::vector<std::string_view> all;
        each_subject(name, grades, kind, [&](std::string_view subject) { all.push_back(subject); });
        return all;
    };
    auto sets = before.sets_;
    each_pair(before.names_, names_, [&](auto b, auto n) {
        if (b && n && before.names_[*b] == names_[*n]) return;
        std::erase_if(sets, [&](auto const& of_kind) {
            return !b || !n ||
                   subjects(of_kind.first, *before.names_[*b], before.grades()) !=
                       subjects(of_kind.first, *names_[*n], grades());
        });
    });
    sets_ = std::move(sets);
}

View::Sets const& View::sets(SubjectKind kind) const {
    auto& of_kind = sets_[kind];
    if (!of_kind) {
        Sets sets;
        auto const add = [&](std::string_view subject, std::uint32_t i) {
            auto set = sets.find(subject);
            if (set == sets.end()) set = sets.try_emplace(std::string{subject}).first;
            set->second.push_back(i);
        };
        for (auto const i : everyone_)
            each_subject(*names_[i], grades(), kind,
                         [&](std::string_view subject) { add(subject, i); });
        of_kind = std::make_shared<Sets const>(std::move(sets));
    }
    return *of_kind;
}

View::Members View::members(SubjectKind kind, std::string_view subject) const {
    if (kind == SubjectKind::portfolio) return everyone_;
    if (kind == SubjectKind::name) {
        auto const at = std::ranges::lower_bound(names_, subject, {}, [](auto const& name) {
            return std::string_view{name->counterparty_id};
        });
        bool const here = at != names_.end() && (*at)->counterparty_id == subject;
        return here ? Members{everyone_}.subspan(static_cast<std::size_t>(at - names_.begin()), 1)
                    : Members{};
    }
    auto const found = sets(kind).find(subject);
    return found != sets(kind).end() ? Members{found->second} : Members{};
}

// Every subject of a kind, in order.
std::vector<std::string_view> View::subjects(SubjectKind kind) const {
    std::vector<std::string_view> subjects;
    for (auto const& set : sets(kind)) subjects.push_back(set.first);
    std::ranges::sort(subjects);
    return subjects;
}

double View::total(Measure measure) const {
    auto const [at, first_time] = totals_.try_emplace(measure);
    if (first_time)
        at->second = *observed(measure, SubjectKind::name, SubjectKind::portfolio, everyone_);
    return at->second;
}

double View::defaulted_loss() const {
    double total = 0.0;
    for (auto const i : everyone_)
        if (facts_[i].grade == grades().in_default()) total += figures_[i].expected_loss;
    return total;
}

Held View::sets_held() const {
    Held held = Held::no;
    for (auto const& name : unknown_)
        if (std::ranges::any_of(name->set_aside,
                                [](auto const& row) { return row.source_table == "exposure"; }))
            held = std::max(held, name->held);
    return held;
}

Held View::anything_held() const {
    if (!anything_held_) {
        anything_held_ = sets_held();
        for (auto const& facts : facts_) anything_held_ = std::max(*anything_held_, facts.held);
    }
    return *anything_held_;
}

bool View::in_scope(Selector const& selector, Name const& name) const {
    auto const listed = [&](std::string_view code) {
        return std::ranges::find(selector.codes, code) != selector.codes.end();
    };
    bool found = false;
    each_subject(name, grades(), selector.fact,
                 [&](std::string_view subject) { found = found || listed(subject); });
    return found;
}

// The members in the limit's scope; kept in `room` where they are not all.
View::Members View::scoped(Limit const& limit, SubjectKind kind, std::string_view subject,
                           Members members, std::vector<std::uint32_t>& room) const {
    for (auto const& selector : limit.where) {
        // Where it asks for what makes the set, it is all of it or nothing.
        if (selector.fact == kind && kind != SubjectKind::connected_group) {
            if (std::ranges::find(selector.codes, subject) == selector.codes.end()) return {};
            continue;
        }
        std::vector<std::uint32_t> scoped;
        std::ranges::copy_if(members, std::back_inserter(scoped),
                             [&](std::uint32_t i) { return in_scope(selector, *names_[i]); });
        room = std::move(scoped);
        members = room;
    }
    return members;
}

// The measure of a set; nothing where it is not defined: a probability or index without exposure.
std::optional<double> View::observed(Measure measure, SubjectKind across, SubjectKind kind,
                                     Members members) const {
    auto const sum = [&](auto figure) {
        double total = 0.0;
        for (auto const i : members) total += figure(i);
        return total;
    };
    auto const money = [&](model::Money Facts::*amount) {
        model::Money total;
        for (auto const i : members) total += facts_[i].*amount;
        return total.units();
    };
    // Weighted by exposure over the members not in default; a name's own needs no weight.
    auto const probability = [&](model::Probability model::NameFigures::*of) {
        if (kind == SubjectKind::name)
            return std::optional{(figures_[members.front()].*of).value()};
        double weighted = 0.0;
        double weight = 0.0;
        for (auto const i : members) {
            if (facts_[i].grade == settings_.grades.in_default()) continue;
            double const exposure = facts_[i].exposure_at_default.units();
            weighted += exposure * (figures_[i].*of).value();
            weight += exposure;
        }
        return weight > 0.0 ? std::optional{weighted / weight} : std::nullopt;
    };
    switch (measure) {
        case Measure::exposure:
            return money(&Facts::exposure_at_default);
        case Measure::commitment:
            return money(&Facts::commitment);
        case Measure::expected_loss:
            return sum([&](std::uint32_t i) {
                // What is lost already is in no total of the portfolio.
                bool const lost = kind == SubjectKind::portfolio &&
                                  facts_[i].grade == settings_.grades.in_default();
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
            return concentration(members, across);
    }
    return std::nullopt;
}

std::optional<double> View::concentration(Members members, SubjectKind across) const {
    return concentration_of(
        members.size(),
        [&](std::size_t i) { return facts_[members[i]].exposure_at_default.units(); },
        [&](std::size_t i, auto&& visit) {
            if (across != SubjectKind::group_or_name || facts_[members[i]].in_a_group)
                each_unit(*names_[members[i]], across, visit);
        });
}

// The code by which a subject chooses its level. A group's grade is its worst member's.
std::string_view View::code(SubjectKind fact, SubjectKind kind, std::string_view subject,
                            Members members) const {
    if (fact == kind) return subject;
    if (fact == SubjectKind::grade) {
        model::Grade worst;
        auto const all =
            kind == SubjectKind::connected_group ? this->members(kind, subject) : members;
        for (auto const i : all) worst = std::max(worst, facts_[i].grade);
        return grades().name(worst);
    }
    Name const& name = *names_[members.front()];
    return fact == SubjectKind::sector    ? name.sector
           : fact == SubjectKind::country ? name.country
                                          : name.segment;
}

View::LevelValue View::level(LevelRule const& rule, Limit const& limit, SubjectKind kind,
                             std::string_view subject, Members members) const {
    auto const found =
        rule.levels.find(rule.by ? code(*rule.by, kind, subject, members) : std::string_view{});
    // The loader has made sure that a rule is complete or has others.
    Level const& level = found != rule.levels.end() ? found->second : rule.others.value();
    if (auto const* amount = std::get_if<model::Money>(&level)) return {.value = amount->units()};
    if (auto const* plain = std::get_if<double>(&level)) return {.value = *plain};
    auto const& share = std::get<ShareOf>(level);
    if (share.total == Total::portfolio) {
        double const total = this->total(limit.measure);
        if (!(total > 0.0)) return {.total_is_empty = true};
        // A total that cannot be believed is a level that cannot.
        return {.value = share.fraction * total,
                .portfolio_share = share.fraction,
                .held = anything_held()};
    }
    auto const capital = model::capital_in_force(shared_, word(total_words, share.total), day_);
    if (!capital) return {.held = Held::level_unknown};
    return {.value = share.fraction * capital->amount, .held = capital->held};
}

// A subject is held by its members and by what cannot be told from them. A contribution depends on
// the whole book, so whatever is held anywhere holds every contribution.
Held View::held(Limit const& limit, SubjectKind kind, std::string_view subject,
                Members members) const {
    Held held = is_set(kind) ? sets_held() : Held::no;
    if (is_contribution(limit.measure)) held = std::max(held, anything_held());
    for (auto const i : members) held = std::max(held, facts_[i].held);
    if (kind == SubjectKind::connected_group)
        for (auto const& name : unknown_)
            if (std::ranges::find(name->groups, subject) != name->groups.end())
                held = std::max(held, name->held);
    return held;
}

std::variant<Usage, Unmeasured> View::measure(Limit const& limit, SubjectKind kind,
                                              std::string_view subject, Members members) const {
    SubjectKey key{limit.limit_id, kind, std::string{subject}};
    Held const held = this->held(limit, kind, subject, members);
    auto const observed = this->observed(limit.measure, limit.across, kind, members);
    if (!observed) return Unmeasured{std::move(key), "no exposure to measure", held};
    auto const breach = level(limit.breach_at, limit, kind, subject, members);
    if (breach.total_is_empty)
        return Unmeasured{std::move(key), "no portfolio total to take a share of", anything_held()};
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
    std::vector<std::uint32_t> room;
    auto const members = scoped(limit, kind, subject, this->members(kind, subject), room);
    if (members.empty()) return std::nullopt;
    auto measured = measure(limit, kind, subject, members);
    auto* const usage = std::get_if<Usage>(&measured);
    return usage != nullptr ? std::optional{std::move(*usage)} : std::nullopt;
}

Checks View::check(Limits const& limits) const {
    return check(Reach{limits});
}

Checks View::check(Reach const& reach) const {
    Checks checks;
    checks.sets_held = sets_held();
    std::vector<std::uint32_t> room;
    auto const add = [&](Limit const& limit, SubjectKind kind, std::string_view subject,
                         Members all) {
        // Under group_or_name a name in a group is part of that.
        if (all.empty() || (limit.per == SubjectKind::group_or_name && kind == SubjectKind::name &&
                            facts_[all.front()].in_a_group))
            return;
        auto const members = scoped(limit, kind, subject, all, room);
        if (members.empty()) return;
        auto measured = measure(limit, kind, subject, members);
        if (auto* usage = std::get_if<Usage>(&measured))
            checks.usages.push_back(std::move(*usage));
        else
            checks.unmeasured.push_back(std::get<Unmeasured>(std::move(measured)));
    };
    auto const add_unknown = [&](Limit const& limit, SubjectKind kind, std::string const& subject,
                                 Held held) {
        SubjectKey key{limit.limit_id, kind, subject};
        if (reach.holds(key))
            checks.unmeasured.push_back({std::move(key), "no usable counterparty row", held});
    };
    for (auto const& [limit, all] : reach.limits())
        for (auto const kind : kinds_of(*limit)) {
            if (!all) {
                for (auto const& subject : reach.touched(kind))
                    add(*limit, kind, subject, members(kind, subject));
            } else if (kind == SubjectKind::name) {
                for (std::size_t i = 0; i < names_.size(); ++i)
                    add(*limit, kind, names_[i]->counterparty_id, Members{everyone_}.subspan(i, 1));
            } else {
                for (auto const& subject : subjects(kind))
                    add(*limit, kind, subject, members(kind, subject));
            }
            // Whoever rows still point at has not left the limit's scope.
            for (auto const& name : unknown_) {
                if (kind == SubjectKind::name)
                    add_unknown(*limit, kind, name->counterparty_id, name->held);
                if (kind == SubjectKind::connected_group)
                    for (auto const& group : name->groups)
                        add_unknown(*limit, kind, group, name->held);
            }
        }
    std::ranges::sort(checks.unmeasured, {}, &Unmeasured::key);
    return checks;
}

}  // namespace alerts
