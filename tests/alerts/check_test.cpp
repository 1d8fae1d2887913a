#include "alerts/check.hpp"

#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <algorithm>
#include <map>
#include <memory>
#include <random>

namespace alerts {
namespace {

using model::Fraction;
using model::Grade;
using model::Held;
using model::Money;
using model::Name;
using model::Probability;

constexpr model::Day today = std::chrono::sys_days{std::chrono::year{2026} / 3 / 31};

Money euros(double units) {
    return *Money::from_units(units);
}

// A small book by hand: four grades, and names with the facts limits ask for.
class Checked : public testing::Test {
protected:
    Checked() {
        settings.base_currency = "EUR";
        settings.grades = model::GradeScale{{"G1", "G2", "G3", "G4"}};
        shared.capital["tier1"] = {{today - std::chrono::days{9}, 1000.0}};
    }

    Name& add(std::string id, double exposure, std::string const& grade = "G2") {
        auto name = std::make_shared<Name>();
        name->counterparty_id = std::move(id);
        name->segment = "corporate";
        name->sector = "MANUF";
        name->country = "AT";
        name->grade = *settings.grades.find(grade);
        name->exposure_at_default = name->commitment = euros(exposure);
        name->loss_at_default = 0.5 * exposure;
        names.push_back(name);
        model::NameFigures own;
        own.default_probability = *Probability::from_fraction(grade == "default" ? 1.0 : 0.1);
        own.expected_loss = own.default_probability.value() * name->loss_at_default;
        own.es_contribution = 0.2 * exposure;
        figures.push_back(own);
        return *name;
    }

    static Limit limit(SubjectKind per, Level level, Measure measure = Measure::exposure) {
        Limit limit;
        limit.limit_id = "L1";
        limit.per = per;
        limit.measure = measure;
        limit.breach_at.levels[""] = level;
        return limit;
    }

    Checks checked(Limit const& limit) const {
        std::vector<std::shared_ptr<Name const>> const all{names.begin(), names.end()};
        return View{all, unknown, figures, nullptr, shared, settings, today}.check({limit});
    }

    Usage usage(Limit const& limit, SubjectKind kind, std::string const& subject) const {
        auto const checks = checked(limit);
        auto const* const found = checks.find({limit.limit_id, kind, subject});
        EXPECT_NE(found, nullptr) << subject;
        return found != nullptr ? *found : Usage{};
    }

    static std::vector<std::string> subjects(Checks const& checks) {
        std::vector<std::string> all;
        for (auto const& usage : checks.usages)
            all.push_back(std::string{word(subject_kind_words, usage.key.kind)} + " " +
                          usage.key.subject);
        return all;
    }

    model::Settings settings;
    model::Shared shared;
    std::vector<std::shared_ptr<Name>> names;
    std::vector<std::shared_ptr<Name const>> unknown;
    std::vector<model::NameFigures> figures;
};

TEST_F(Checked, EveryKindOfSubjectSumsItsMembers) {
    add("C1", 100.0).groups = {"GR1", "GR2"};
    add("C2", 20.0).sector = "RETAIL";
    names[1]->groups = {"GR1"};
    add("C3", 3.0, "G4").segment = "bank";
    names[2]->country = "DE";
    EXPECT_EQ(usage(limit(SubjectKind::name, euros(50)), SubjectKind::name, "C1").observed, 100.0);
    auto const per = [&](SubjectKind kind, std::string const& subject) {
        return usage(limit(kind, euros(50)), kind, subject).observed;
    };
    EXPECT_EQ(per(SubjectKind::connected_group, "GR1"), 120.0);
    EXPECT_EQ(per(SubjectKind::connected_group, "GR2"), 100.0);
    EXPECT_EQ(per(SubjectKind::sector, "MANUF"), 103.0);
    EXPECT_EQ(per(SubjectKind::country, "DE"), 3.0);
    EXPECT_EQ(per(SubjectKind::grade, "G4"), 3.0);
    EXPECT_EQ(per(SubjectKind::segment, "bank"), 3.0);
    EXPECT_EQ(per(SubjectKind::portfolio, "portfolio"), 123.0);
}

TEST_F(Checked, GroupOrNameWritesGroupsAndTheNamesInNone) {
    add("C1", 100.0).groups = {"GR1"};
    add("C2", 20.0);
    EXPECT_THAT(subjects(checked(limit(SubjectKind::group_or_name, euros(50)))),
                testing::UnorderedElementsAre("connected_group GR1", "name C2"));
}

TEST_F(Checked, EqualIsInsideAndAThousandthMoreIsNot) {
    add("C1", 50.0);
    auto const at = limit(SubjectKind::name, euros(50));
    EXPECT_EQ(usage(at, SubjectKind::name, "C1").standing(), Standing::within);
    names[0]->exposure_at_default = Money::from_thousandths(50'001);
    EXPECT_EQ(usage(at, SubjectKind::name, "C1").standing(), Standing::breach);
    EXPECT_EQ(usage(at, SubjectKind::name, "C1").headroom(), 0.0);
}

TEST_F(Checked, AShareOfCapitalIsTheNewestNotInTheFuture) {
    shared.capital["tier1"].push_back({today + std::chrono::days{1}, 9000.0});
    add("C1", 240.0);
    auto rule = limit(SubjectKind::name, ShareOf{0.25, Total::tier1});
    rule.warning_at = ShareOfBreach{0.9};
    auto const seen = usage(rule, SubjectKind::name, "C1");
    EXPECT_EQ(seen.breach_level, 250.0);
    EXPECT_EQ(seen.warning_level, 225.0);
    EXPECT_EQ(seen.standing(), Standing::warning);
}

TEST_F(Checked, WithoutCapitalTheLevelIsUnknownAndTheSubjectHeld) {
    add("C1", 240.0);
    auto const seen =
        usage(limit(SubjectKind::name, ShareOf{0.25, Total::own_funds}), SubjectKind::name, "C1");
    EXPECT_FALSE(seen.breach_level);
    EXPECT_FALSE(seen.standing());
    EXPECT_EQ(seen.held, Held::level_unknown);
}

TEST_F(Checked, AShareOfThePortfolioIsOfTheWholeBookWhateverTheScope) {
    add("C1", 60.0).segment = "bank";
    add("C2", 40.0);
    auto rule = limit(SubjectKind::sector, ShareOf{0.3, Total::portfolio});
    rule.where = {{SubjectKind::segment, {"bank"}}};
    auto const seen = usage(rule, SubjectKind::sector, "MANUF");
    EXPECT_EQ(seen.observed, 60.0);
    EXPECT_DOUBLE_EQ(*seen.breach_level, 30.0);
}

// A row set aside elsewhere raised the total, and with it a level that then cured an alert.
TEST_F(Checked, AShareOfATotalThatCannotBeBelievedIsHeld) {
    add("C1", 60.0);
    add("C2", 40.0).held = Held::row_set_aside;
    names[1]->sector = "RETAIL";
    auto const rule = limit(SubjectKind::sector, ShareOf{0.3, Total::portfolio});
    EXPECT_EQ(usage(rule, SubjectKind::sector, "MANUF").held, Held::row_set_aside);
    EXPECT_EQ(usage(limit(SubjectKind::sector, euros(30)), SubjectKind::sector, "MANUF").held,
              Held::no);
}

TEST_F(Checked, ALevelByGradeFollowsTheGradeAndAGroupItsWorstMember) {
    add("C1", 10.0, "G1").groups = {"GR1"};
    add("C2", 10.0, "G3").groups = {"GR1"};
    auto rule = limit(SubjectKind::group_or_name, euros(0));
    rule.breach_at = {.by = SubjectKind::grade,
                      .levels = {{"G1", euros(50)}, {"G3", euros(30)}},
                      .others = euros(5)};
    EXPECT_EQ(usage(rule, SubjectKind::connected_group, "GR1").breach_level, 30.0);
    rule.where = {{SubjectKind::grade, {"G1"}}};  // the scope is the names', the grade the group's
    EXPECT_EQ(usage(rule, SubjectKind::connected_group, "GR1").observed, 10.0);
    EXPECT_EQ(usage(rule, SubjectKind::connected_group, "GR1").breach_level, 30.0);
    rule.where.clear();
    rule.per = SubjectKind::name;
    EXPECT_EQ(usage(rule, SubjectKind::name, "C1").breach_level, 50.0);
    names[0]->grade = settings.grades.in_default();
    EXPECT_EQ(usage(rule, SubjectKind::name, "C1").breach_level, 5.0);
}

TEST_F(Checked, WhereNamesItsMembersByEveryFact) {
    add("C1", 1.0).groups = {"GR1"};
    add("C2", 2.0, "G4").country = "DE";
    auto rule = limit(SubjectKind::portfolio, euros(9));
    auto const under = [&](SubjectKind fact, std::vector<std::string> codes) {
        rule.where = {{fact, std::move(codes)}};
        return usage(rule, SubjectKind::portfolio, "portfolio").observed;
    };
    EXPECT_EQ(under(SubjectKind::grade, {"G4", "default"}), 2.0);
    EXPECT_EQ(under(SubjectKind::country, {"DE", "AT"}), 3.0);
    EXPECT_EQ(under(SubjectKind::name, {"C1"}), 1.0);
    EXPECT_EQ(under(SubjectKind::connected_group, {"GR1"}), 1.0);
    EXPECT_EQ(under(SubjectKind::sector, {"MANUF"}), 3.0);
}

TEST_F(Checked, AProbabilityOfASetIsWeightedByExposureWithoutTheDefaulted) {
    add("C1", 30.0);
    add("C2", 10.0);
    add("C3", 99.0, "default");
    figures[0].default_probability = *Probability::from_fraction(0.02);
    figures[1].default_probability = *Probability::from_fraction(0.06);
    auto const rule = limit(SubjectKind::sector, 0.05, Measure::default_probability);
    EXPECT_DOUBLE_EQ(usage(rule, SubjectKind::sector, "MANUF").observed, 0.03);  // (0.6 + 0.6)/40
}

TEST_F(Checked, AProbabilityOfASetWithoutExposureIsNoUsage) {
    add("C1", 0.0);
    auto const checks = checked(limit(SubjectKind::sector, 0.05, Measure::default_probability));
    EXPECT_TRUE(checks.usages.empty());
    ASSERT_EQ(checks.unmeasured.size(), 1U);
    EXPECT_EQ(checks.held({"L1", SubjectKind::sector, "MANUF"}), Held::no);
    names[0]->held = Held::rate_missing;
    EXPECT_EQ(checked(limit(SubjectKind::sector, 0.05, Measure::default_probability))
                  .held({"L1", SubjectKind::sector, "MANUF"}),
              Held::rate_missing);
}

TEST_F(Checked, WhatIsLostAlreadyIsInNoPortfolioTotal) {
    add("C1", 100.0);
    add("C2", 40.0, "default");
    auto const per = [&](SubjectKind kind, std::string const& subject) {
        return usage(limit(kind, euros(9), Measure::expected_loss), kind, subject).observed;
    };
    EXPECT_DOUBLE_EQ(per(SubjectKind::portfolio, "portfolio"), 5.0);
    EXPECT_DOUBLE_EQ(per(SubjectKind::grade, "default"), 20.0);
    EXPECT_DOUBLE_EQ(per(SubjectKind::name, "C2"), 20.0);
}

TEST_F(Checked, ANameHeldHoldsItsSetsAndEveryContribution) {
    add("C1", 1.0).held = Held::rate_old;
    names[0]->groups = {"GR1"};
    add("C2", 2.0).sector = "RETAIL";
    auto const held = [&](SubjectKind kind, std::string const& subject, Measure measure) {
        return usage(limit(kind, euros(9), measure), kind, subject).held;
    };
    EXPECT_EQ(held(SubjectKind::connected_group, "GR1", Measure::exposure), Held::rate_old);
    EXPECT_EQ(held(SubjectKind::sector, "MANUF", Measure::exposure), Held::rate_old);
    EXPECT_EQ(held(SubjectKind::portfolio, "portfolio", Measure::exposure), Held::rate_old);
    EXPECT_EQ(held(SubjectKind::sector, "RETAIL", Measure::exposure), Held::no);
    EXPECT_EQ(held(SubjectKind::sector, "RETAIL", Measure::es_contribution), Held::rate_old);
}

// Its row may be late: nobody can tell which sector the orphaned exposure belongs to.
TEST_F(Checked, AnExposureWithoutCounterpartyHoldsEverySet) {
    add("C1", 1.0);
    auto stranger = std::make_shared<Name>();
    stranger->counterparty_id = "C9";
    stranger->known = false;
    stranger->groups = {"GR9"};
    stranger->held = Held::row_set_aside;
    stranger->set_aside.push_back({"exposure", "F9", "no counterparty C9", 5.0});
    unknown.push_back(stranger);
    auto const checks = checked(limit(SubjectKind::sector, euros(9)));
    EXPECT_EQ(checks.usages.front().held, Held::row_set_aside);
    EXPECT_EQ(checks.held({"L1", SubjectKind::sector, "TRANSP"}), Held::row_set_aside);
    auto const by_name = checked(limit(SubjectKind::name, euros(9)));
    EXPECT_EQ(by_name.usages.front().held, Held::no);
    EXPECT_EQ(by_name.held({"L1", SubjectKind::name, "C9"}), Held::row_set_aside);
    EXPECT_EQ(by_name.held({"L1", SubjectKind::name, "C8"}), Held::no);
    auto const by_group = checked(limit(SubjectKind::connected_group, euros(9)));
    EXPECT_EQ(by_group.held({"L1", SubjectKind::connected_group, "GR9"}), Held::row_set_aside);
}

// Shares 60 and 40 by name; the two groups share C1, so all three names are one unit.
TEST_F(Checked, ConcentrationCountsGroupsThatShareAMemberAsOne) {
    add("C1", 50.0).groups = {"GR1", "GR2"};
    add("C2", 30.0).groups = {"GR1"};
    add("C3", 20.0).groups = {"GR2"};
    auto rule = limit(SubjectKind::portfolio, 0.02, Measure::concentration_index);
    rule.across = SubjectKind::name;
    EXPECT_DOUBLE_EQ(usage(rule, SubjectKind::portfolio, "portfolio").observed, 0.38);
    rule.across = SubjectKind::group_or_name;
    EXPECT_DOUBLE_EQ(usage(rule, SubjectKind::portfolio, "portfolio").observed, 1.0);
    names[2]->groups.clear();
    EXPECT_DOUBLE_EQ(usage(rule, SubjectKind::portfolio, "portfolio").observed, 0.68);
}

TEST_F(Checked, AnUncertainFigureNearItsLevelIsAtLevel) {
    Usage seen;
    seen.breach_level = 100.0;
    seen.observed_error = 2.0;
    seen.observed = 106.5;
    EXPECT_EQ(seen.standing(), Standing::breach);
    seen.observed = 106.0;
    EXPECT_EQ(seen.standing(), Standing::at_level);
    seen.observed = 93.0;
    EXPECT_EQ(seen.standing(), Standing::within);
    seen.warning_level = 90.0;
    EXPECT_EQ(seen.standing(), Standing::at_level);
}

// What a touched turn looks at is enough: taken into what was known, it is what a look at
// everything gives. Books are made at random, and moved at random a few names at a time.
TEST(Reach, FindsAllThatAFewMovedNamesMove) {
    model::Settings settings;
    settings.base_currency = "EUR";
    settings.grades = model::GradeScale{{"G1", "G2", "G3"}};
    model::Shared shared;
    shared.capital["tier1"] = {{today - std::chrono::days{9}, 1000.0}};
    LevelRule const by_grade{.by = SubjectKind::grade,
                             .levels = {{"G1", euros(60)}, {"G2", euros(30)}},
                             .others = euros(9)};
    Limits limits;
    auto const add = [&](SubjectKind per, Measure measure, LevelRule level) -> Limit& {
        auto& limit = limits.emplace_back();
        limit.limit_id = "L" + std::to_string(9 - limits.size());
        limit.per = per;
        limit.measure = measure;
        limit.breach_at = std::move(level);
        return limit;
    };
    auto const one = [](Level level) {
        return LevelRule{.by = {}, .levels = {{"", level}}, .others = {}};
    };
    add(SubjectKind::group_or_name, Measure::exposure, one(ShareOf{0.05, Total::tier1}));
    add(SubjectKind::name, Measure::exposure, by_grade).where = {
        {SubjectKind::sector, {"MANUF", "RETAIL"}}};
    add(SubjectKind::connected_group, Measure::commitment, by_grade);
    add(SubjectKind::country, Measure::exposure, one(ShareOf{0.4, Total::portfolio}));
    add(SubjectKind::sector, Measure::default_probability, one(0.02));
    add(SubjectKind::grade, Measure::expected_loss, one(euros(5))).where = {
        {SubjectKind::grade, {"G3", "default"}}};
    add(SubjectKind::portfolio, Measure::concentration_index, one(0.1)).across =
        SubjectKind::group_or_name;
    add(SubjectKind::sector, Measure::es_contribution, one(ShareOf{0.4, Total::portfolio}));
    Limits exact = limits;
    exact.pop_back();

    std::mt19937 bits{7};
    auto const any = [&](auto... of) {
        std::vector<std::string> const all{of...};
        return all[bits() % all.size()];
    };
    auto const name = [&](int number) {
        auto made = std::make_shared<Name>();
        made->counterparty_id = "C" + std::to_string(100 + number);
        made->segment = "corporate";
        made->sector = any("MANUF", "RETAIL", "AGRI");
        made->country = any("AT", "DE");
        if (bits() % 2 == 0) made->groups = {any("GR1", "GR2", "GR3")};
        made->grade = {static_cast<std::uint8_t>(bits() % 4)};
        made->exposure_at_default = made->commitment = euros(static_cast<double>(bits() % 50));
        made->held = bits() % 10 == 0 ? Held::rate_old : Held::no;
        made->known = bits() % 12 != 0;
        if (bits() % 2 == 0) made->set_aside.push_back({"exposure", "F", "no counterparty", {}});
        return made;
    };
    std::map<int, std::shared_ptr<Name const>> all;
    struct Side {
        std::vector<std::shared_ptr<Name const>> names;
        std::vector<std::shared_ptr<Name const>> unknown;
        std::vector<model::NameFigures> figures;
        std::optional<View> view;
    };
    auto const side = [&](View const* before) {
        auto made = std::make_unique<Side>();
        for (auto const& [number, each] : all) {
            (each->known ? made->names : made->unknown).push_back(each);
            if (!each->known) continue;
            auto& own = made->figures.emplace_back();
            own.default_probability = *Probability::from_fraction(0.01 * (1 + each->grade.rank));
            own.expected_loss = 0.1 * each->exposure_at_default.units();
        }
        made->view.emplace(made->names, made->unknown, made->figures, nullptr, shared, settings,
                           today, before);
        return made;
    };
    for (int number = 0; number < 30; ++number) all[number] = name(number);
    auto last = side(nullptr);
    auto known = last->view->check(exact);
    for (int turn = 0; turn < 300; ++turn) {
        for (auto moved = 1 + bits() % 3; moved > 0; --moved) {
            auto const number = static_cast<int>(bits() % 35);
            if (bits() % 8 == 0)
                all.erase(number);
            else
                all[number] = name(number);
        }
        auto now = side(&*last->view);
        Reach const reach{limits, *last->view, *now->view};
        auto const seen = now->view->check(reach);
        auto differences = known.differences(seen, reach);
        known.take(seen, reach, std::move(differences));
        auto const expected = now->view->check(exact);
        ASSERT_EQ(known.usages, expected.usages) << turn;
        ASSERT_EQ(known.sets_held, expected.sets_held);
        ASSERT_TRUE(std::ranges::equal(known.unmeasured, expected.unmeasured, {}, &Unmeasured::key,
                                       &Unmeasured::key))
            << turn;
        last = std::move(now);
    }
}

TEST_F(Checked, ATouchedTurnHoldsNoContributionAndOfOthersWhatMoved) {
    add("C1", 60.0);
    add("C2", 50.0).sector = "RETAIL";
    auto contribution = limit(SubjectKind::sector, euros(1), Measure::es_contribution);
    contribution.limit_id = "L2";
    Limits const limits{limit(SubjectKind::name, euros(9)), contribution};
    std::vector<std::shared_ptr<Name const>> const all{names.begin(), names.end()};
    View const before{all, unknown, figures, nullptr, shared, settings, today};
    auto moved = all;
    auto other = *all[1];
    other.exposure_at_default = euros(51.0);
    moved[1] = std::make_shared<Name const>(other);
    View const now{moved, unknown, figures, nullptr, shared, settings, today, &before};
    Reach const touched{limits, before, now};
    EXPECT_THAT(subjects(now.check(touched)), testing::ElementsAre("name C2"));
    EXPECT_TRUE(touched.holds({"L1", SubjectKind::name, "C2"}));
    EXPECT_FALSE(touched.holds({"L1", SubjectKind::name, "C1"}));
    EXPECT_FALSE(touched.holds({"L2", SubjectKind::sector, "RETAIL"}));
    EXPECT_TRUE(Reach{limits}.holds({"L2", SubjectKind::sector, "MANUF"}));
    EXPECT_TRUE(Reach{limits}.holds({"no longer in force", SubjectKind::name, "C1"}));
}

}  // namespace
}  // namespace alerts
