#include "config/parts.hpp"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <map>
#include <optional>
#include <set>
#include <utility>

namespace config {
namespace {

using alerts::Level;
using alerts::LevelRule;
using alerts::Limit;
using alerts::Measure;
using alerts::SubjectKind;
using alerts::Unit;

constexpr long max_days = 36'500;

constexpr std::array<std::string_view, 6> segments{"corporate", "bank", "sovereign",
                                                   "fund",      "ccp",  "other"};
constexpr std::array<std::string_view, 3> later_measures{"gross_exposure", "potential_exposure",
                                                         "large_exposure"};
constexpr std::array<std::string_view, 3> later_facts{"watch", "product", "remaining_years"};

template <class Words>
bool has(Words const& words, std::string_view word) {
    return std::ranges::find(words, word) != words.end();
}

// The spellings of some values, in the order given.
template <class Enum, std::size_t Size>
std::vector<std::string_view> spellings(std::pair<Enum, std::string_view> const (&words)[Size],
                                        std::initializer_list<Enum> values) {
    std::vector<std::string_view> texts;
    for (auto const value : values) texts.push_back(alerts::word(words, value));
    return texts;
}
template <class Enum, std::size_t Size>
std::vector<std::string_view> spellings(std::pair<Enum, std::string_view> const (&words)[Size]) {
    std::vector<std::string_view> texts;
    for (auto const& [value, text] : words) texts.push_back(text);
    return texts;
}

std::vector<std::string_view> split(std::string_view text) {
    std::vector<std::string_view> words;
    for (std::size_t at = 0; at < text.size();) {
        auto const end = std::min(text.find(' ', at), text.size());
        if (end > at) words.push_back(text.substr(at, end - at));
        at = end + 1;
    }
    return words;
}

// "25% of tier1" is 0.25 of "tier1"; "2.5%" is 0.025 of "".
struct Percentage {
    double fraction = 0.0;
    std::string_view of;
};

std::optional<Percentage> percentage(std::string_view text) {
    auto const sign = text.find('%');
    if (sign == std::string_view::npos) return std::nullopt;
    auto const fraction = decimal(text.substr(0, sign), -2);
    auto rest = text.substr(sign + 1);
    if (!fraction || (!rest.empty() && !rest.starts_with(" of "))) return std::nullopt;
    return Percentage{*fraction, rest.empty() ? rest : rest.substr(4)};
}

// "EUR 60 m": k, m and bn are thousands, millions and thousands of millions.
struct Amount {
    std::string_view currency;
    model::Money money;
};

std::optional<Amount> amount(std::string_view text) {
    auto const words = split(text);
    if (words.size() < 2 || words.size() > 3) return std::nullopt;
    int exponent = 0;
    if (words.size() == 3) {
        if (words[2] == "k")
            exponent = 3;
        else if (words[2] == "m")
            exponent = 6;
        else if (words[2] == "bn")
            exponent = 9;
        else
            return std::nullopt;
    }
    auto const units = decimal(words[1], exponent);
    auto const money = units ? model::Money::from_units(*units) : std::nullopt;
    if (!money) return std::nullopt;
    return Amount{words[0], *money};
}

// Whether a level can be chosen by this fact of the subject: there must be one fact a subject.
bool is_fact_of(SubjectKind fact, SubjectKind per) {
    if (fact == per || per == SubjectKind::name) return true;
    bool const has_worst_member =
        per == SubjectKind::connected_group || per == SubjectKind::group_or_name;
    return fact == SubjectKind::grade && has_worst_member;
}

// Whether one level is above another; false where only a book can tell.
bool is_above(Level const& a, Level const& b) {
    if (a.index() != b.index()) return false;
    if (auto const* share = std::get_if<alerts::ShareOf>(&a)) {
        auto const& other = std::get<alerts::ShareOf>(b);
        return share->total == other.total && share->fraction > other.fraction;
    }
    if (auto const* money = std::get_if<model::Money>(&a))
        return *money > std::get<model::Money>(b);
    return std::get<double>(a) > std::get<double>(b);
}

// A level rule and where its levels stand; the keys are those of the rule, and "others".
struct PlacedRule {
    LevelRule rule;
    std::map<std::string, Place, std::less<>> places;

    [[nodiscard]] Level const* level(std::string const& code) const {
        auto const found = rule.levels.find(rule.by ? code : std::string{});
        if (found != rule.levels.end()) return &found->second;
        return rule.others ? &*rule.others : nullptr;
    }
    [[nodiscard]] Place place(std::string const& code) const {
        auto const found = places.find(rule.by ? code : std::string{});
        return found != places.end() ? found->second : places.at("others");
    }
};

class LimitsReader {
public:
    LimitsReader(std::filesystem::path const& folder, model::Settings const& settings)
        : settings_{settings}, file_{folder, "limits.yaml"} {
        for (std::size_t rank = 0; rank < settings.grades.size(); ++rank)
            grades_.push_back(settings.grades.name({static_cast<std::uint8_t>(rank)}));
        if (!grades_.empty()) grades_.emplace_back("default");
    }

    Part<alerts::Limits> read() {
        YamlNode const root = read_yaml(file_);
        Keys keys{file_, root};
        if (auto const* const node = keys.find("defaults")) read_defaults(*node);
        auto const* const list = keys.require("limits");
        keys.refuse_later({"retired"});
        keys.finish();

        alerts::Limits limits;
        if (list != nullptr && is_kind(file_, *list, YamlNode::Kind::list, "a list of limits")) {
            if (list->items.empty()) file_.fault(list->place, "no limit", "at least one");
            for (auto const& item : list->items) limits.push_back(read_limit(item));
        }
        Part<alerts::Limits> part{std::move(limits), {}};
        part.files.push_back(std::move(file_));
        return part;
    }

private:
    void read_defaults(YamlNode const& node) {
        Keys keys{file_, node};
        if (auto const* const warning = keys.find("warning_at")) {
            auto const expected = "a share such as 85% of breach, or none";
            if (auto const text = read_text(file_, warning, expected);
                text && !read_breach_share(*warning, defaults_.warning_at))
                file_.fault(warning->place, in_quotes(*text), expected);
        }
        read_handling(keys, defaults_);
        keys.finish();
    }

    // What a limit shares with the defaults.
    void read_handling(Keys& keys, Limit& limit) {
        auto const* const margin = keys.find("cure_margin");
        auto const margin_expected = "a percentage from 0% to below 100% such as 5%";
        if (auto const text = read_text(file_, margin, margin_expected)) {
            auto const share = percentage(*text);
            if (share && share->of.empty() && share->fraction < 1.0)
                limit.cure_margin = share->fraction;
            else
                file_.fault(margin->place, in_quotes(*text), margin_expected);
        }

        if (auto const owner = read_text(file_, keys.find("owner"), "who looks after the limit"))
            limit.owner = *owner;

        auto const* const days = keys.find("acknowledge_for");
        auto const days_expected =
            fmt::format("whole days, from 1 to {}, such as 5 days", max_days);
        if (auto const text = read_text(file_, days, days_expected)) {
            auto const words = split(*text);
            bool const in_days = words.size() == 2 && (words[1] == "days" || words[1] == "day");
            auto const count = in_days ? whole_number(words[0]) : std::nullopt;
            if (count && *count >= 1 && *count <= max_days)
                limit.acknowledge_for_days = static_cast<int>(*count);
            else
                file_.fault(days->place, in_quotes(*text), days_expected);
        }
    }

    Limit read_limit(YamlNode const& node) {
        Limit limit = defaults_;
        Keys keys{file_, node};
        keys.refuse_later({"granted", "greater_of", "lesser_of", "except", "part_of", "list_at",
                           "if_not_granted", "effective_from", "effective_until",
                           "breach_probability_warning"});
        read_id(keys.require("id"), limit);
        auto const* const per_node = keys.require("per");
        auto const per = read_per(per_node);
        auto const measure = read_measure(keys.require("measure"));
        limit.per = per.value_or(limit.per);
        limit.measure = measure.value_or(limit.measure);
        auto const* const across = keys.find("across");
        read_across(across, limit);
        if (per && measure) check_across(across, *per_node, limit);
        read_where(keys.find("where"), limit);
        read_handling(keys, limit);
        if (auto const act = read_text(file_, keys.find("act"), "what to do, in one paragraph"))
            limit.act = *act;

        auto const* const breach_at = keys.require("breach_at");
        auto const* const warning_at = keys.find("warning_at");
        keys.finish();
        // Which levels fit is known only with the measure.
        if (!measure) return limit;
        std::optional<PlacedRule> breach;
        if (breach_at != nullptr) breach = read_rule(*breach_at, per, *measure);
        if (breach) limit.breach_at = breach->rule;
        if (warning_at == nullptr || read_breach_share(*warning_at, limit.warning_at)) return limit;
        if (auto const warning = read_rule(*warning_at, per, *measure)) {
            limit.warning_at = warning->rule;
            if (breach) check_order(*warning, *breach);
        }
        return limit;
    }

    void read_id(YamlNode const* node, Limit& limit) {
        auto const id = read_code(file_, node, "an id");
        if (!id) return;
        auto const [first, is_new] = ids_.try_emplace(*id, node->place);
        if (model::is_reserved(*id))
            file_.fault(node->place, "the reserved word " + in_quotes(*id), "another id");
        else if (!is_new)
            file_.fault(node->place,
                        fmt::format("the id {} stands twice, first at {}:{}", in_quotes(*id),
                                    first->second.line, first->second.column),
                        "an id of its own for each limit");
        limit.limit_id = *id;
    }

    std::optional<SubjectKind> read_per(YamlNode const* node) {
        if (node != nullptr && node->kind == YamlNode::Kind::list) {
            file_.fault(node->place, "a limit on a cross of subjects is not yet available",
                        one_of(spellings(alerts::subject_kind_words)));
            return std::nullopt;
        }
        auto const word = read_word(file_, node, spellings(alerts::subject_kind_words));
        return word ? alerts::find(alerts::subject_kind_words, *word) : std::nullopt;
    }

    std::optional<Measure> read_measure(YamlNode const* node) {
        auto const words = spellings(alerts::measure_words);
        if (node != nullptr && has(later_measures, node->text)) {
            file_.fault(node->place, in_quotes(node->text) + " is not yet available",
                        one_of(words));
            return std::nullopt;
        }
        auto const word = read_word(file_, node, words);
        return word ? alerts::find(alerts::measure_words, *word) : std::nullopt;
    }

    void read_across(YamlNode const* node, Limit& limit) {
        auto const words =
            spellings(alerts::subject_kind_words, {SubjectKind::name, SubjectKind::group_or_name,
                                                   SubjectKind::sector, SubjectKind::country});
        if (auto const word = read_word(file_, node, words))
            limit.across = *alerts::find(alerts::subject_kind_words, *word);
    }

    void check_across(YamlNode const* across, YamlNode const& per, Limit const& limit) {
        if (limit.measure != Measure::concentration_index) {
            if (across != nullptr)
                file_.fault(across->key_place, "'across' has no effect on this measure",
                            "it with concentration_index only");
            return;
        }
        bool const has_one_part = limit.per == SubjectKind::name || limit.per == limit.across ||
                                  limit.per == SubjectKind::group_or_name;
        if (has_one_part)
            file_.fault(per.place,
                        fmt::format("the concentration of a {} across {} is always 1", per.text,
                                    alerts::word(alerts::subject_kind_words, limit.across)),
                        "a subject of many parts");
    }

    // where: {segment: corporate, grade: G6 or worse, country: [AT, DE]}
    void read_where(YamlNode const* node, Limit& limit) {
        if (node == nullptr || !is_kind(file_, *node, YamlNode::Kind::map, "facts and their codes"))
            return;
        if (node->items.empty())
            file_.fault(node->place, "no condition", "a fact and its codes, or no 'where'");
        auto const facts =
            spellings(alerts::subject_kind_words,
                      {SubjectKind::segment, SubjectKind::sector, SubjectKind::country,
                       SubjectKind::grade, SubjectKind::name, SubjectKind::connected_group});
        for (auto const& item : node->items) {
            if (has(later_facts, item.key)) {
                file_.fault(item.key_place, in_quotes(item.key) + " is not yet available",
                            one_of(facts));
            } else if (!has(facts, item.key)) {
                file_.fault(item.key_place, "unknown fact " + in_quotes(item.key),
                            one_of(facts, item.key));
            } else {
                auto const fact = *alerts::find(alerts::subject_kind_words, item.key);
                limit.where.push_back({fact, read_codes(item, fact)});
            }
        }
    }

    std::vector<std::string> read_codes(YamlNode const& node, SubjectKind fact) {
        std::vector<std::string> codes;
        auto const add = [&](YamlNode const& item) {
            for (auto& code : read_selection(item, fact)) {
                if (has(codes, code))
                    file_.fault(item.place, in_quotes(code) + " is chosen twice", "each code once");
                else
                    codes.push_back(std::move(code));
            }
        };
        if (node.kind != YamlNode::Kind::list) {
            add(node);
        } else {
            if (node.items.empty()) file_.fault(node.place, "an empty list", "at least one code");
            for (auto const& item : node.items) add(item);
        }
        return codes;
    }

    // One code, or the grades of "G6 or worse" (default is the worst) or "G3 or better".
    std::vector<std::string> read_selection(YamlNode const& node, SubjectKind fact) {
        constexpr std::string_view or_worse = " or worse";
        constexpr std::string_view or_better = " or better";
        bool const worse = node.text.ends_with(or_worse);
        bool const better = node.text.ends_with(or_better);
        bool const range = fact == SubjectKind::grade && (worse || better);
        YamlNode first = node;
        if (range) first.text.resize(node.text.size() - (worse ? or_worse : or_better).size());
        auto const code = read_subject(first, fact);
        if (!code) return {};
        if (!range || grades_.empty()) return {*code};
        auto const split_at = std::ranges::find(grades_, *code);
        if (worse) return {split_at, grades_.end()};
        return {grades_.begin(), split_at + 1};
    }

    // A code that a subject of this kind can have.
    std::optional<std::string> read_subject(YamlNode const& node, SubjectKind kind) {
        if (kind == SubjectKind::segment || (kind == SubjectKind::grade && !grades_.empty())) {
            auto const word = kind == SubjectKind::segment ? read_word(file_, &node, segments)
                                                           : read_word(file_, &node, grades_);
            return word ? std::optional{std::string{*word}} : std::nullopt;
        }
        auto const expected =
            fmt::format("the code of a {}", alerts::word(alerts::subject_kind_words, kind));
        auto code = read_code(file_, &node, expected);
        bool const usable =
            kind == SubjectKind::grade || !code || !model::is_reserved(*code) ||
            (*code == "unknown" && (kind == SubjectKind::sector || kind == SubjectKind::country));
        if (usable) return code;
        file_.fault(node.place, "the reserved word " + in_quotes(*code), expected);
        return std::nullopt;
    }

    // "85% of breach" or "none"; false, without a fault, for whatever else.
    bool read_breach_share(YamlNode const& node, alerts::WarningRule& rule) {
        if (node.kind != YamlNode::Kind::scalar) return false;
        auto const share = percentage(node.text);
        if (node.text == "none") {
            rule = std::monostate{};
        } else if (share && share->of == "breach") {
            if (share->fraction > 1.0)
                file_.fault(node.place, "a warning level above its breach level", "at most 100%");
            rule = alerts::ShareOfBreach{share->fraction};
        } else {
            return false;
        }
        return true;
    }

    // One level for all, or {by: fact, code: level, …, others: level}.
    std::optional<PlacedRule> read_rule(YamlNode const& node, std::optional<SubjectKind> per,
                                        Measure measure) {
        PlacedRule placed;
        if (node.kind != YamlNode::Kind::map) {
            auto const level = read_level(node, measure);
            if (!level) return std::nullopt;
            placed.rule.levels.emplace("", *level);
            placed.places.emplace("", node.place);
            return placed;
        }
        auto const by = read_by(node, per);
        if (!by) return std::nullopt;
        placed.rule.by = by;
        for (auto const& item : node.items) {
            if (item.key == "by") continue;
            auto const level = read_level(item, measure);
            if (level && item.key == "others") {
                placed.rule.others = level;
                placed.places.emplace("others", item.place);
            } else if (item.key != "others") {
                YamlNode const key{
                    .kind = YamlNode::Kind::scalar, .place = item.key_place, .text = item.key};
                auto const code = read_subject(key, *by);
                if (!code || !level) continue;
                placed.rule.levels.emplace(*code, *level);
                placed.places.emplace(*code, item.place);
            }
        }
        check_complete(node, *by);
        return placed;
    }

    // The fact that chooses the level.
    std::optional<SubjectKind> read_by(YamlNode const& node, std::optional<SubjectKind> per) {
        for (std::string_view const later :
             {"greater_of", "lesser_of", "list_at", "if_not_granted", "granted"})
            if (auto const item = std::ranges::find(node.items, later, &YamlNode::key);
                item != node.items.end()) {
                file_.fault(item->key_place, in_quotes(later) + " is not yet available",
                            "a level, or levels {by: …}");
                return std::nullopt;
            }
        auto const item = std::ranges::find(node.items, "by", &YamlNode::key);
        if (item == node.items.end()) {
            file_.fault(node.place, "levels without what chooses among them", "'by'");
            return std::nullopt;
        }
        auto const facts = spellings(
            alerts::subject_kind_words,
            {SubjectKind::grade, SubjectKind::sector, SubjectKind::country, SubjectKind::segment});
        auto const word = read_word(file_, &*item, facts);
        if (!word) return std::nullopt;
        auto const by = *alerts::find(alerts::subject_kind_words, *word);
        if (per && !is_fact_of(by, *per)) {
            file_.fault(item->place,
                        fmt::format("a {} has no one {}",
                                    alerts::word(alerts::subject_kind_words, *per), *word),
                        "a fact that each subject of the limit has once");
            return std::nullopt;
        }
        return by;
    }

    // Every code has a level: all grades and segments are known, sectors and countries are not.
    void check_complete(YamlNode const& node, SubjectKind by) {
        auto const has_key = [&](std::string_view key) {
            return std::ranges::find(node.items, key, &YamlNode::key) != node.items.end();
        };
        if (has_key("others")) return;
        std::vector<std::string_view> missing;
        if (by == SubjectKind::grade || by == SubjectKind::segment) {
            std::span<std::string_view const> const all =
                by == SubjectKind::grade ? std::span<std::string_view const>{grades_} : segments;
            std::ranges::copy_if(all, std::back_inserter(missing),
                                 [&](auto code) { return !has_key(code); });
            if (missing.empty()) return;
            file_.fault(node.place, fmt::format("no level for {}", fmt::join(missing, ", ")),
                        fmt::format("a level for every {}, or 'others'",
                                    by == SubjectKind::grade ? "grade and default" : "segment"));
        } else {
            file_.fault(node.place, "no level for codes that are not listed", "'others'");
        }
    }

    std::optional<Level> read_level(YamlNode const& node, Measure measure) {
        auto const unit = alerts::unit_of(measure);
        auto const share = percentage(node.text);
        if (node.text == "granted" || (share && share->of.starts_with("limit "))) {
            file_.fault(node.place, in_quotes(node.text) + " is not yet available",
                        expected_level(unit));
            return std::nullopt;
        }
        if (unit == Unit::index)
            return read_number(file_, &node, expected_level(unit),
                               [](double x) { return x >= 0.0 && x <= 1.0; });
        if (!is_kind(file_, node, YamlNode::Kind::scalar, expected_level(unit)))
            return std::nullopt;
        if (unit == Unit::fraction) {
            if (share && share->of.empty() && share->fraction <= 1.0) return share->fraction;
        } else if (share) {
            auto const total = alerts::find(alerts::total_words, share->of);
            bool const reachable = total != alerts::Total::portfolio || share->fraction <= 1.0;
            if (total && reachable) return alerts::ShareOf{share->fraction, *total};
        } else if (auto const money = amount(node.text)) {
            auto const& base = settings_.base_currency;
            if (base.empty() || money->currency == base) return money->money;
            file_.fault(node.place, in_quotes(node.text) + " is not in the base currency",
                        "an amount in " + base);
            return std::nullopt;
        }
        file_.fault(node.place,
                    fmt::format("{} is no level of {}", in_quotes(node.text),
                                alerts::word(alerts::measure_words, measure)),
                    expected_level(unit));
        return std::nullopt;
    }

    [[nodiscard]] std::string expected_level(Unit unit) const {
        auto const& base = settings_.base_currency;
        switch (unit) {
            case Unit::fraction:
                return "a probability from 0% to 100% such as 2.5%";
            case Unit::index:
                return "a number from 0 to 1 such as 0.02";
            case Unit::money:
                break;
        }
        return fmt::format(
            "an amount such as {} 60 m (k, m, bn or none), or a share such as 25% of tier1, "
            "own_funds or portfolio (at most 100% of the portfolio)",
            base.empty() ? "EUR" : base);
    }

    // No warning level above the breach level of the same subject, as far as the files can tell.
    void check_order(PlacedRule const& warning, PlacedRule const& breach) {
        if (warning.rule.by && breach.rule.by && warning.rule.by != breach.rule.by) return;
        std::set<std::string> codes{"others"};
        for (auto const* const placed : {&warning, &breach})
            for (auto const& [code, level] : placed->rule.levels)
                if (!code.empty()) codes.insert(code);
        for (auto const& code : codes) {
            auto const* const low = warning.level(code);
            auto const* const high = breach.level(code);
            if (low == nullptr || high == nullptr || !is_above(*low, *high)) continue;
            bool const one_for_all = !warning.rule.by && !breach.rule.by;
            file_.fault(warning.place(code),
                        "a warning level above its breach level" +
                            (one_for_all ? std::string{} : " for " + in_quotes(code)),
                        "a level at or below it");
        }
    }

    model::Settings const& settings_;
    File file_;
    std::vector<std::string_view> grades_;  // and default; empty where they are not known
    Limit defaults_;
    std::map<std::string, Place, std::less<>> ids_;
};

}  // namespace

Part<alerts::Limits> read_limits(std::filesystem::path const& folder,
                                 model::Settings const& settings) {
    return LimitsReader{folder, settings}.read();
}

}  // namespace config
