#include "alerts/cause.hpp"

#include "tests/support/model_book.hpp"

#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <cmath>
#include <memory>
#include <numeric>

namespace alerts {
namespace {

using model::Day;
using model::Inputs;
using model::Money;
using std::chrono::days;

constexpr Day today = std::chrono::sys_days{std::chrono::year{2026} / 3 / 31};
constexpr model::Instant now{model::Time{today} + std::chrono::hours{9}, today};

Money euros(double units) {
    return *Money::from_units(units);
}

// Two books a turn apart, made of rows, with closed-form figures and contributions by hand.
class Explained : public testing::Test {
protected:
    struct Side {
        std::vector<Inputs> inputs;
        model::Shared shared;
        Limits limits;
        std::shared_ptr<model::Settings const> settings;
        model::Book book;
        std::vector<model::NameFigures> figures;

        Stage stage() {
            model::Book::Changes changes{.whole = true, .counterparties = inputs, .shared = shared};
            book.apply(std::move(changes), settings, now);
            model::Migration const migration{*settings};
            figures.clear();
            for (auto const& name : book.names()) {
                auto own = model::closed_form(*name, *settings, migration);
                own.es_contribution = es_per_loss * name->loss_at_default;
                figures.push_back(own);
            }
            return {book, figures, limits};
        }
        double es_per_loss = 0.5;
    };

    Explained() {
        auto settings = tests::lender_settings();
        settings.rating_sources = {"internal"};
        settings.unrated_as = *settings.grades.find("G7");
        before.settings = std::make_shared<model::Settings const>(settings);
        before.shared.rates["USD"] = {{today - days{1}, 0.8}};
        before.shared.capital["tier1"] = {{today - days{1}, 1000.0}};
        before.inputs = {company("C1"), company("C2")};
        Limit limit;
        limit.limit_id = "L1";
        limit.breach_at.levels[""] = euros(90.0);
        before.limits = {limit};
        after = before;
    }

    static Inputs company(std::string const& id) {
        Inputs inputs;
        inputs.counterparty_id = id;
        inputs.row.emplace();
        inputs.row->segment = "corporate";
        inputs.row->sector = "MANUF";
        inputs.row->country = "AT";
        inputs.ratings = {{"internal", model::Time{today} - days{30}, "G2"}};
        model::ExposureRow row;
        row.exposure_id = "F-" + id;
        row.product = "term_loan";
        row.currency = "USD";
        row.drawn = 100.0;
        row.undrawn = 50.0;
        row.conversion_factor = 0.0;
        row.collateral = 10.0;
        inputs.exposures = {row};
        return inputs;
    }

    Explanation explanation(SubjectKind kind, std::string const& subject,
                            Severity severity = Severity::breach) {
        std::pair<SubjectKey, Severity> const asked[] = {{{"L1", kind, subject}, severity}};
        auto const old = before.stage();
        auto const fresh = after.stage();
        auto explanations = explain(old, fresh, asked);
        auto const& cause = explanations.front().cause;
        double sum = 0.0;
        for (auto const& [part, amount] : cause.parts) sum += amount;
        EXPECT_NEAR(sum, cause.after.excess() - cause.before.excess(), 1e-9);
        return explanations.front();
    }

    static double part(Explanation const& explanation, Part wanted) {
        for (auto const& [part, amount] : explanation.cause.parts)
            if (part == wanted) return amount;
        return 0.0;
    }

    Side before;
    Side after;
};

// By hand: (100 - 10) USD at 0.8 is 72; at 0.9, with no collateral and 120 drawn, 108.
TEST_F(Explained, ExposurePartsAddUpOneInputAtATime) {
    after.shared.rates["USD"].push_back({today, 0.9});
    after.inputs[0].exposures[0].collateral = 0.0;
    after.inputs[0].exposures[0].drawn = 120.0;
    after.inputs[0].exposures[0].undrawn = 30.0;
    auto const why = explanation(SubjectKind::name, "C1");
    EXPECT_DOUBLE_EQ(why.cause.before.observed, 72.0);
    EXPECT_DOUBLE_EQ(why.cause.after.observed, 108.0);
    EXPECT_NEAR(part(why, Part::exchange_rate), 9.0, 1e-9);  // 90 x 0.1
    EXPECT_NEAR(part(why, Part::collateral), 9.0, 1e-9);     // 10 x 0.9
    EXPECT_NEAR(part(why, Part::exposure), 18.0, 1e-9);      // 20 x 0.9
    EXPECT_EQ(why.cause.parts.size(), 3U);
    EXPECT_EQ(why.cause.largest(), Part::exposure);
}

TEST_F(Explained, ADowngradeLowersTheLevelByItsOwnPart) {
    auto& rule = before.limits[0].breach_at;
    rule = {.by = SubjectKind::grade, .levels = {{"G2", euros(90)}}, .others = euros(60)};
    after.limits = before.limits;
    after.inputs[0].ratings.push_back({"internal", model::Time{today}, "G5"});
    auto const why = explanation(SubjectKind::name, "C1");
    EXPECT_EQ(why.cause.before.level, 90.0);
    EXPECT_EQ(why.cause.after.level, 60.0);
    EXPECT_THAT(why.cause.parts, testing::ElementsAre(std::pair(Part::rating, 30.0)));
    EXPECT_EQ(why.nature, Nature::passive);
}

TEST_F(Explained, CapitalAndTheFileMoveTheLevelEachByItsPart) {
    before.limits[0].breach_at.levels[""] = ShareOf{0.1, Total::tier1};
    after.limits[0].breach_at.levels[""] = ShareOf{0.05, Total::tier1};
    after.shared.capital["tier1"].push_back({today, 800.0});
    auto const why = explanation(SubjectKind::name, "C1");
    EXPECT_NEAR(part(why, Part::capital), 20.0, 1e-9);
    EXPECT_NEAR(part(why, Part::limit), 40.0, 1e-9);
}

TEST_F(Explained, ANewCounterpartyIsExposureAndAnActOfTheFirm) {
    after.inputs.push_back(company("C3"));
    after.inputs[2].exposures[0].drawn = 200.0;
    auto const why = explanation(SubjectKind::name, "C3");
    EXPECT_EQ(why.cause.before.observed, 0.0);
    EXPECT_NEAR(part(why, Part::exposure), 152.0, 1e-9);
    EXPECT_EQ(why.nature, Nature::active);
}

TEST_F(Explained, ANameThatChangesItsSectorIsTheRestOfThePortfolio) {
    after.inputs[1].row->sector = "RETAIL";
    before.limits[0].per = after.limits[0].per = SubjectKind::sector;
    auto const why = explanation(SubjectKind::sector, "RETAIL");
    EXPECT_THAT(why.cause.parts, testing::ElementsAre(std::pair(Part::portfolio, 72.0)));
}

TEST_F(Explained, ANameThatLeavesTakesItsExposureWithIt) {
    before.limits[0].per = after.limits[0].per = SubjectKind::sector;
    after.inputs.pop_back();
    auto const why = explanation(SubjectKind::sector, "MANUF");
    EXPECT_THAT(why.cause.parts, testing::ElementsAre(std::pair(Part::exposure, -72.0)));
}

TEST_F(Explained, TheModelsRulesAreTheirOwnPart) {
    auto settings = *before.settings;
    settings.loss_given_default = *model::Fraction::from_fraction(0.9);
    after.settings = std::make_shared<model::Settings const>(settings);
    before.limits[0].measure = after.limits[0].measure = Measure::expected_loss;
    auto const why = explanation(SubjectKind::name, "C1");
    ASSERT_EQ(why.cause.parts.size(), 1U);
    EXPECT_EQ(why.cause.parts[0].first, Part::model);
    EXPECT_NEAR(why.cause.parts[0].second, why.cause.before.observed, 1e-12);  // LGD doubled
}

TEST_F(Explained, AContributionFollowsItsOwnLossAndTheRestIsThePortfolio) {
    before.limits[0].measure = after.limits[0].measure = Measure::es_contribution;
    after.inputs[0].exposures[0].drawn = 190.0;
    after.es_per_loss = 0.6;  // what everybody's moves made of the price of risk
    auto const why = explanation(SubjectKind::name, "C1");
    EXPECT_NEAR(part(why, Part::exposure), 0.5 * 0.45 * 72.0, 1e-9);
    EXPECT_NEAR(part(why, Part::portfolio), 0.1 * 0.45 * 144.0, 1e-9);
}

TEST_F(Explained, ALimitThatIsNewIsThePartOfTheFile) {
    before.limits.clear();
    auto const why = explanation(SubjectKind::name, "C1");
    EXPECT_FALSE(why.cause.before.level);
    EXPECT_THAT(why.cause.parts, testing::ElementsAre(std::pair(Part::limit, -18.0)));
}

// Whose act: only what the firm itself chose makes an excess active.
TEST_F(Explained, NatureTellsTheFirmsOwnActsFromTheCustomersAndTheMarkets) {
    struct Case {
        std::string what;
        std::function<void(Side&)> change;
        Nature nature;
    };
    std::vector<Case> const cases{
        {"a drawing under the committed line",
         [](Side& side) {
             side.inputs[0].exposures[0].drawn = 150.0;
             side.inputs[0].exposures[0].undrawn = 0.0;
         },
         Nature::passive},
        {"a drawing beyond what it leaves inside",
         [](Side& side) { side.inputs[0].exposures[0].drawn = 250.0; }, Nature::passive},
        {"a drawing where nothing was committed",
         [](Side& side) {
             side.inputs[0].exposures[0].product = "no line";
             side.inputs[0].exposures[0].drawn = 250.0;
         },
         Nature::active},
        {"a drawing under a line that was never committed",
         [](Side& side) {
             side.inputs[0].exposures[0].committed = false;
             side.inputs[0].exposures[0].drawn = 150.0;
             side.inputs[0].exposures[0].undrawn = 0.0;
         },
         Nature::active},
        {"a rate",
         [](Side& side) {
             side.shared.rates["USD"].push_back({today, 1.5});
         },
         Nature::passive},
        {"a second deal",
         [](Side& side) {
             auto row = side.inputs[0].exposures[0];
             row.exposure_id = "F-new";
             side.inputs[0].exposures.push_back(row);
         },
         Nature::active},
    };
    auto const inputs = after.inputs;
    auto const shared = after.shared;
    auto const inputs_before = before.inputs;
    for (auto const& [what, change, nature] : cases) {
        after.inputs = inputs;
        after.shared = shared;
        before.inputs = inputs_before;
        change(after);
        auto& row = before.inputs[0].exposures[0];
        row.committed = after.inputs[0].exposures[0].committed;
        if (after.inputs[0].exposures[0].product == "no line") row.undrawn = 0.0;
        auto const why = explanation(SubjectKind::name, "C1");
        ASSERT_GT(why.cause.after.excess(), 0.0) << what;
        EXPECT_EQ(why.nature, nature) << what;
    }
}

TEST_F(Explained, ReleasedCollateralIsAnActOfTheFirm) {
    before.inputs[0].exposures[0].collateral = 60.0;
    before.limits[0].breach_at.levels[""] = after.limits[0].breach_at.levels[""] = euros(70);
    EXPECT_EQ(explanation(SubjectKind::name, "C1").nature, Nature::active);
}

TEST(FoundAtStart, IsOnePartWithoutANature) {
    Usage usage;
    usage.observed = 120.0;
    usage.breach_level = 100.0;
    auto const why = explain_at_start(nullptr, usage, Severity::breach);
    EXPECT_THAT(why.cause.parts, testing::ElementsAre(std::pair(Part::found_at_start, 20.0)));
    EXPECT_FALSE(why.nature);
}

TEST(Sentence, TellsWhoWhatAndWhy) {
    Alert alert;
    alert.key = {"name-by-grade", SubjectKind::name, "C0042"};
    alert.measure = Measure::exposure;
    alert.severity = Severity::breach;
    alert.state = State::open;
    alert.observed = 34'200'000.0;
    alert.level = 18'000'000.0;
    Cause const cause{{34'200'000.0, 30'000'000.0 + 5'000'000.0},
                      {34'200'000.0, 18'000'000.0},
                      {{Part::rating, 12'000'000.0}, {Part::limit, 5'000'000.0}}};
    EXPECT_EQ(sentence(alert, "Brackwater Mills", cause, Nature::passive, "EUR"),
              "Exposure of name C0042 (Brackwater Mills) is EUR 34.2 m, against the breach level "
              "EUR 18.0 m of name-by-grade; since before: rating +EUR 12.0 m, limit +EUR 5.0 m; "
              "not by an act of our own (passive).");
}

TEST(Sentence, TellsApartWhatRoundsAlike) {
    Alert alert;
    alert.key = {"L1", SubjectKind::name, "C1"};
    alert.state = State::open;
    alert.observed = 7'660'000.0;
    alert.level = 7'650'000.0;
    EXPECT_EQ(sentence(alert, "", {}, std::nullopt, "EUR"),
              "Exposure of name C1 is EUR 7.6600 m, against the warning level EUR 7.6500 m of L1.");
}

TEST(Readable, GivesAReaderThreeDigits) {
    EXPECT_EQ(readable(12'345'678.9, Unit::money, "EUR"), "EUR 12.3 m");
    EXPECT_EQ(readable(-1'234'567'890.0, Unit::money, "EUR"), "EUR -1.23 bn");
    EXPECT_EQ(readable(999.4, Unit::money, "EUR"), "EUR 999.4");
    EXPECT_EQ(readable(0.02513, Unit::fraction, "EUR"), "2.51%");
    EXPECT_EQ(readable(0.0213, Unit::index, "EUR"), "0.0213");
}

}  // namespace
}  // namespace alerts
