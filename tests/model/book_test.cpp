#include "model/book.hpp"

#include "tests/support/model_book.hpp"

#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <memory>

namespace model {
namespace {

using std::chrono::days;
using testing::ElementsAre;
using testing::IsEmpty;

constexpr Day today = std::chrono::sys_days{std::chrono::year{2026} / 3 / 31};
constexpr Instant now{Time{today} + std::chrono::hours{9}, today};

ExposureRow loan(std::string id, double drawn) {
    ExposureRow row;
    row.exposure_id = std::move(id);
    row.product = "term_loan";
    row.currency = "EUR";
    row.drawn = drawn;
    return row;
}

Inputs company(std::vector<ExposureRow> exposures) {
    Inputs inputs;
    inputs.counterparty_id = "C1";
    inputs.row = CounterpartyRow{.legal_name = "Brackwater Mills",
                                 .segment = "corporate",
                                 .sector = "MANUF",
                                 .country = "AT",
                                 .country_of_risk = std::nullopt,
                                 .lei = std::nullopt,
                                 .asset_correlation = std::nullopt};
    inputs.ratings.push_back({"internal", Time{today} - days{30}, "G3"});
    inputs.exposures = std::move(exposures);
    return inputs;
}

class Derive : public testing::Test {
protected:
    Derive() {
        settings.rating_sources = {"internal", "agency"};
        settings.conversion_factor["revolver"] = *Fraction::from_fraction(0.5);
        settings.conversion_factor["uncommitted"] = *Fraction::from_fraction(0.1);
        settings.conversion_factor["others"] = *Fraction::from_fraction(1.0);
        settings.unrated_as = *settings.grades.find("G7");
        shared.rates["USD"] = {
            {today - days{10}, 0.5}, {today - days{1}, 0.9}, {today + days{1}, 2.0}};
    }

    Name derived(Inputs const& inputs) const { return derive(inputs, shared, settings, now); }

    Settings settings = tests::lender_settings();
    Shared shared;
};

// Expected numbers by hand: drawn 100 + add-on 5 + half of 40 undrawn.
TEST_F(Derive, AFacilityIsDrawnAddOnAndConvertedUndrawn) {
    auto row = loan("F1", 100.0);
    row.product = "revolver";
    row.add_on = 5.0;
    row.undrawn = 40.0;
    auto const name = derived(company({row}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 125'000);
    EXPECT_EQ(name.commitment.thousandths(), 140'000);
    EXPECT_DOUBLE_EQ(name.loss_at_default, 125.0 * 0.45);
}

TEST_F(Derive, AnUncommittedLineConvertsAsSuchAndIsNoCommitment) {
    auto row = loan("F1", 100.0);
    row.product = "revolver";
    row.undrawn = 40.0;
    row.committed = false;
    auto const name = derived(company({row}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 104'000);
    EXPECT_EQ(name.commitment.thousandths(), 100'000);
}

TEST_F(Derive, TheNewestRateNotInTheFutureConverts) {
    auto row = loan("F1", 100.0);
    row.currency = "USD";
    auto const name = derived(company({row}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 90'000);
    EXPECT_EQ(name.held, Held::no);
}

TEST_F(Derive, AnOldRateConvertsAndHolds) {
    shared.rates["USD"] = {{today - days{6}, 0.9}};
    auto row = loan("F1", 100.0);
    row.currency = "USD";
    auto const name = derived(company({row}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 90'000);
    EXPECT_EQ(name.held, Held::rate_old);
    EXPECT_THAT(name.facilities.front().flags, ElementsAre("rate_old"));
}

TEST_F(Derive, ACurrencyThatNeverHadARateSetsTheRowAside) {
    shared.rates.clear();
    auto row = loan("F1", 100.0);
    row.currency = "USD";
    auto const name = derived(company({row, loan("F2", 7.0)}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 7'000);
    EXPECT_EQ(name.held, Held::rate_missing);
    ASSERT_EQ(name.set_aside.size(), 1U);
    EXPECT_EQ(name.set_aside.front().source_key, "F1");
}

TEST_F(Derive, ANettingSetNeverFallsBelowNothing) {
    auto gain = loan("F1", 60.0);
    auto loss = loan("F2", -80.0);
    gain.netting_set = loss.netting_set = "N1";
    auto const name = derived(company({gain, loss, loan("F3", 10.0)}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 10'000);
    EXPECT_THAT(name.set_aside, IsEmpty());
}

TEST_F(Derive, CollateralCoversItsNettingSetOnly) {
    auto covered = loan("F1", 100.0);
    covered.collateral = 130.0;
    auto const name = derived(company({covered, loan("F2", 50.0)}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 50'000);
}

// 100.000 over three equal facilities: 33.333 each, the odd thousandth to the smallest id.
TEST_F(Derive, RoundingLeavesItsRemainderToTheLargestFacility) {
    auto a = loan("F1", 50.0);
    auto b = loan("F2", 50.0);
    auto c = loan("F3", 50.0);
    a.netting_set = b.netting_set = c.netting_set = "N1";
    a.collateral = 50.0;
    auto const name = derived(company({a, b, c}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 100'000);
    EXPECT_EQ(name.facilities[0].exposure_at_default.thousandths(), 33'334);
    EXPECT_EQ(name.facilities[1].exposure_at_default.thousandths(), 33'333);
    EXPECT_EQ(name.facilities[2].exposure_at_default.thousandths(), 33'333);
}

TEST_F(Derive, AFacilityPastMaturityKeepsItsBalanceAndLosesItsLine) {
    auto row = loan("F1", 100.0);
    row.undrawn = 40.0;
    row.maturity = today - days{1};
    auto const name = derived(company({row}));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 100'000);
    EXPECT_EQ(name.commitment.thousandths(), 100'000);
    EXPECT_THAT(name.facilities.front().flags, ElementsAre("matured"));
    row.maturity = today;
    EXPECT_EQ(derived(company({row})).exposure_at_default.thousandths(), 140'000);
}

TEST_F(Derive, RowsOutsideTheirDomainAreSetAsideAndHold) {
    double const nan = std::numeric_limits<double>::quiet_NaN();
    double const infinite = std::numeric_limits<double>::infinity();
    std::vector<std::pair<std::string, std::function<void(ExposureRow&)>>> const spoilt{
        {"drawn", [&](ExposureRow& row) { row.drawn = nan; }},
        {"drawn", [&](ExposureRow& row) { row.drawn = infinite; }},
        {"drawn", [&](ExposureRow& row) { row.drawn = -1.0; }},
        {"undrawn", [&](ExposureRow& row) { row.undrawn = -infinite; }},
        {"add_on", [&](ExposureRow& row) { row.add_on = -1.0; }},
        {"collateral", [&](ExposureRow& row) { row.collateral = -0.01; }},
        {"collateral", [&](ExposureRow& row) { row.collateral = nan; }},
        {"conversion_factor", [&](ExposureRow& row) { row.conversion_factor = 1.2; }},
        {"loss_given_default", [&](ExposureRow& row) { row.loss_given_default = 1.7; }},
        {"loss_given_default", [&](ExposureRow& row) { row.loss_given_default = nan; }},
    };
    for (auto const& [word, spoil] : spoilt) {
        auto row = loan("F1", 100.0);
        spoil(row);
        auto const name = derived(company({row, loan("F2", 7.0)}));
        ASSERT_EQ(name.set_aside.size(), 1U) << word;
        EXPECT_THAT(name.set_aside.front().reason, testing::StartsWith(word));
        EXPECT_EQ(name.held, Held::row_set_aside) << word;
        EXPECT_EQ(name.exposure_at_default.thousandths(), 7'000) << word;
    }
}

TEST_F(Derive, AnUnratedNameKeepsItsExposureAndTakesTheGradeOfTheUnrated) {
    auto inputs = company({loan("F1", 100.0)});
    inputs.ratings.clear();
    auto const name = derived(inputs);
    EXPECT_EQ(settings.grades.name(name.grade), "G7");
    EXPECT_THAT(name.flags, testing::Contains("unrated"));
    EXPECT_EQ(name.exposure_at_default.thousandths(), 100'000);
    EXPECT_EQ(name.held, Held::no);
}

TEST_F(Derive, RatingsFollowSourceAgeAndTime) {
    struct Case {
        std::vector<RatingRow> ratings;
        std::string grade;
        std::string flag;
    };
    auto const at = [](int days_ago) { return Time{today} - days{days_ago}; };
    std::vector<Case> const cases{
        {{{"internal", at(9), "G2"}, {"agency", at(1), "G5"}}, "G2", ""},
        {{{"internal", at(9), "G2"}, {"internal", at(3), "G4"}}, "G4", ""},
        {{{"internal", at(-1), "G6"}, {"internal", at(3), "G4"}}, "G4", ""},
        {{{"internal", at(551), "G2"}, {"agency", at(1), "G5"}}, "G5", ""},
        {{{"internal", at(551), "G2"}}, "G7", "rating_old"},
        {{{"internal", at(9000), "default"}}, "default", ""},
        {{{"internal", at(9), "G2"}, {"internal", at(3), "withdrawn"}}, "G7", "withdrawn"},
        {{{"internal", at(3), "withdrawn"}, {"agency", at(9), "G1"}}, "G1", ""},
        {{{"elsewhere", at(3), "G1"}}, "G7", "unrated"},
    };
    for (auto const& [ratings, grade, flag] : cases) {
        auto inputs = company({});
        inputs.ratings = ratings;
        std::ranges::sort(inputs.ratings, {}, &RatingRow::rated_at);
        auto const name = derived(inputs);
        EXPECT_EQ(settings.grades.name(name.grade), grade);
        if (flag.empty())
            EXPECT_THAT(name.flags, IsEmpty());
        else
            EXPECT_THAT(name.flags, testing::Contains(flag));
    }
}

TEST_F(Derive, AGradeThatIsNotOfTheScaleHoldsUntilANewerOneRules) {
    auto inputs = company({loan("F1", 100.0)});
    inputs.ratings = {{"internal", Time{today} - days{9}, "G2"},
                      {"internal", Time{today} - days{3}, "g2 "}};
    auto const held = derived(inputs);
    EXPECT_EQ(held.held, Held::row_set_aside);
    EXPECT_EQ(settings.grades.name(held.grade), "G2");
    inputs.ratings.push_back({"internal", Time{today} - days{1}, "G4"});
    EXPECT_EQ(derived(inputs).held, Held::no);
}

TEST_F(Derive, WithoutACounterpartyRowNothingIsCountedAndAllIsShown) {
    auto inputs = company({loan("F1", 100.0)});
    inputs.row.reset();
    inputs.memberships.push_back({"GR1", today - days{5}, std::nullopt});
    auto const name = derived(inputs);
    EXPECT_FALSE(name.known);
    EXPECT_EQ(name.exposure_at_default, Money{});
    EXPECT_EQ(name.set_aside.size(), 3U);  // membership, exposure, rating
    EXPECT_THAT(name.groups, ElementsAre("GR1"));
}

TEST_F(Derive, ACodeWithACommaSetsTheCounterpartyAside) {
    for (auto const* const code : {"A,B", "A\nB", "others"}) {
        auto inputs = company({loan("F1", 100.0)});
        inputs.row->sector = code;
        auto const name = derived(inputs);
        EXPECT_FALSE(name.known) << code;
        EXPECT_EQ(name.held, Held::row_set_aside) << code;
    }
}

// Ninety-three of them overflowed the sum and ended the process.
TEST_F(Derive, AbsurdlyManyAbsurdAmountsStopNobody) {
    std::vector<ExposureRow> rows;
    for (int i = 0; i < 200; ++i) rows.push_back(loan("F" + std::to_string(i), 9.9e13));
    EXPECT_EQ(derived(company(rows)).exposure_at_default, *Money::from_units(9.2e15));
    rows.resize(1);
    rows[0].undrawn = 9e13;
    rows[0].conversion_factor = 0.0;
    EXPECT_EQ(derived(company(rows)).held, Held::row_set_aside);
}

// A text of ten thousand characters fitted no index of the results and ended the process.
TEST_F(Derive, ALongCodeIsSetAsideAndShownByItsBeginning) {
    auto inputs = company({loan("F1", 1.0)});
    inputs.row->sector = std::string(10'000, 'x');
    EXPECT_FALSE(derived(inputs).known);
    inputs = company({loan(std::string(10'000, 'f'), 1.0)});
    inputs.exposures[0].currency = std::string(10'000, 'c');
    auto const name = derived(inputs);
    ASSERT_EQ(name.set_aside.size(), 1U);
    EXPECT_LT(name.set_aside[0].reason.size(), 100U);
    EXPECT_LT(name.set_aside[0].source_key.size(), 300U);
}

TEST_F(Derive, AnAbsurdRateIsNoRate) {
    for (double const rate : {1e-9, 1e-320, 0.0, -1.0, 1e12}) {
        shared.rates["USD"] = {{today - days{1}, 0.9}, {today, rate}};
        auto row = loan("F1", 100.0);
        row.currency = "USD";
        auto const name = derived(company({row}));
        EXPECT_EQ(name.exposure_at_default.thousandths(), 90'000) << rate;
        EXPECT_EQ(name.held, Held::row_set_aside) << rate;
    }
}

// The check digits of ISO 17442's own kind of example: 529900T8BM49AURSDO55 is 1 modulo 97.
TEST_F(Derive, AWrongLeiOrCorrelationIsFlaggedAndIgnored) {
    auto inputs = company({});
    inputs.row->lei = "529900T8BM49AURSDO55";
    EXPECT_THAT(derived(inputs).flags, IsEmpty());
    inputs.row->lei = "529900T8BM49AURSDO56";
    inputs.row->asset_correlation = 0.995;
    auto const name = derived(inputs);
    EXPECT_THAT(name.flags, ElementsAre("lei_invalid", "asset_correlation_invalid"));
    EXPECT_FALSE(name.asset_correlation);
}

TEST_F(Derive, AMembershipHoldsThroughItsLastDay) {
    auto inputs = company({});
    inputs.memberships = {{"GR1", today - days{5}, today},
                          {"GR2", today - days{5}, today - days{1}},
                          {"GR3", today + days{1}, std::nullopt},
                          {"GR1", today - days{2}, std::nullopt}};
    EXPECT_THAT(derived(inputs).groups, ElementsAre("GR1"));
}

class Books : public Derive {
protected:
    static Digest digest(std::uint64_t value) { return {{value, 0, 0, 0}}; }

    Inputs numbered(std::string id, double drawn, std::uint64_t value) {
        auto inputs = company({loan("F-" + id, drawn)});
        inputs.counterparty_id = std::move(id);
        inputs.digest = digest(value);
        return inputs;
    }

    std::shared_ptr<Settings const> rules = std::make_shared<Settings const>(settings);
};

TEST_F(Books, ATouchedNameIsReplacedAndTheOthersAreShared) {
    Book book;
    Book::Changes all{.whole = true, .counterparties = {}, .shared = shared};
    all.counterparties = {numbered("C2", 2.0, 2), numbered("C1", 1.0, 1), numbered("C3", 3.0, 3)};
    EXPECT_TRUE(book.apply(std::move(all), rules, now));
    auto const before = book;
    ASSERT_EQ(book.names().size(), 3U);
    EXPECT_EQ(book.names()[0]->counterparty_id, "C1");

    Book::Changes one;
    one.counterparties = {numbered("C2", 20.0, 22)};
    EXPECT_TRUE(book.apply(std::move(one), rules, now));
    EXPECT_EQ(book.names()[1]->exposure_at_default.thousandths(), 20'000);
    EXPECT_EQ(before.names()[1]->exposure_at_default.thousandths(), 2'000);
    EXPECT_EQ(book.names()[0], before.names()[0]);
    EXPECT_EQ(book.digest(), digest(26));
}

TEST_F(Books, ANoOpChangesNothing) {
    Book book;
    Book::Changes all{.whole = true, .counterparties = {numbered("C1", 1.0, 1)}, .shared = shared};
    book.apply(std::move(all), rules, now);
    Book::Changes same;
    same.counterparties = {numbered("C1", 1.0, 1)};
    EXPECT_FALSE(book.apply(std::move(same), rules, now));
}

TEST_F(Books, ACounterpartyWithoutRowsIsGone) {
    Book book;
    Book::Changes all{.whole = true, .counterparties = {numbered("C1", 1.0, 1)}, .shared = shared};
    book.apply(std::move(all), rules, now);
    Book::Changes gone;
    gone.counterparties.emplace_back().counterparty_id = "C1";
    EXPECT_TRUE(book.apply(std::move(gone), rules, now));
    EXPECT_THAT(book.names(), IsEmpty());
    EXPECT_EQ(book.digest(), digest(0));
}

TEST_F(Books, AFutureRatingRulesFromItsInstantOn) {
    auto inputs = numbered("C1", 1.0, 1);
    auto const then = now.at + std::chrono::hours{2};
    inputs.ratings.push_back({"internal", then, "G6"});
    Book book;
    book.apply({.whole = true, .counterparties = {inputs}, .shared = shared}, rules, now);
    EXPECT_EQ(rules->grades.name(book.names()[0]->grade), "G3");
    ASSERT_EQ(book.due(), then);
    EXPECT_TRUE(book.apply({}, rules, {then, today}));
    EXPECT_EQ(rules->grades.name(book.names()[0]->grade), "G6");
    EXPECT_FALSE(book.due());
}

TEST_F(Books, SharedRowsThatCannotBeUsedAreShownWhileNothingNewerRules) {
    shared.rates["USD"].insert(shared.rates["USD"].end() - 1, {today, -1.0});
    shared.capital["tier1"] = {{today - days{9}, 100.0}, {today, 0.0}};
    Book book;
    book.apply({.whole = true, .counterparties = {}, .shared = shared}, rules, now);
    auto const rows = book.set_aside();
    ASSERT_EQ(rows.size(), 2U);
    EXPECT_EQ(rows[0].source_key, "USD/2026-03-31");
    EXPECT_EQ(rows[1].source_key, "tier1/2026-03-31");
    EXPECT_EQ(rate_in_force(shared, *rules, "USD", today)->held, Held::row_set_aside);
    EXPECT_EQ(capital_in_force(shared, "tier1", today)->amount, 100.0);
}

TEST(MoneyTest, RoundsOnceHalfToEven) {
    EXPECT_EQ(Money::from_units(0.0005)->thousandths(), 0);
    EXPECT_EQ(Money::from_units(0.0015)->thousandths(), 2);
    EXPECT_FALSE(Money::from_units(std::numeric_limits<double>::quiet_NaN()));
    EXPECT_FALSE(Money::from_units(1e16));
}

TEST(MoneyTest, ASumOutOfRangeStaysAtTheLargest) {
    auto const most = *Money::from_units(9.2e15);
    EXPECT_EQ(most + Money::from_thousandths(1), most);
    EXPECT_EQ(most + most, most);
    EXPECT_EQ(Money{} - most - most, Money{} - most);
    EXPECT_EQ((Money{} - most).thousandths(), -most.thousandths());
}

TEST(DigestTest, CarriesAcrossWords) {
    Digest digest{{~0ULL, ~0ULL, 0, 0}};
    digest += Digest{{1, 0, 0, 0}};
    EXPECT_EQ(digest, (Digest{{0, 0, 1, 0}}));
}

TEST(IsoTest, WritesDaysAndInstants) {
    EXPECT_EQ(iso(today), "2026-03-31");
    EXPECT_EQ(iso(now.at + std::chrono::microseconds{250}), "2026-03-31T09:00:00.000250Z");
}

}  // namespace
}  // namespace model
