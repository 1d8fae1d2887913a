#include "model/verify.hpp"

#include "tests/support/model_book.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <limits>
#include <string>

namespace {

using model::Engine;
using model::Figures;
using model::Judgement;
using model::Settings;
using model::Verdict;

struct Both {
    Settings settings;
    tests::Names names;
    Figures engine;
    Judgement judge;

    Both(Settings used, tests::Names book, std::uint64_t scenarios = 20'000)
        : settings{std::move(used)},
          names{std::move(book)},
          engine{Engine{0}.assess(names, std::make_shared<Settings const>(settings))},
          judge{model::judge(names, settings,
                             {.scenarios = scenarios,
                              .mode = model::JudgePlan::Mode::shifted,
                              .sharpened = 2 * model::checked_names},
                             0)} {}
    [[nodiscard]] Verdict verdict() const { return compare(names, settings, engine, judge); }
};

// Made once: what a test changes, it changes in a copy.
Both lender() {
    static Both const both{tests::lender_settings(), tests::lender(600), 50'000};
    return both;
}

std::string told(Verdict const& verdict) {
    std::string text;
    for (auto const& check : verdict.checks)
        if (!check.agrees)
            text += check.what + " " + check.counterparty_id + ": " + std::to_string(check.engine) +
                    " " + std::to_string(check.judge) + " p " + std::to_string(check.false_alarm) +
                    "\n";
    return text;
}

TEST(Verdict, AgreesOnAGoodBook) {
    Both const both = lender();
    auto const verdict = both.verdict();
    EXPECT_TRUE(verdict.agrees()) << told(verdict);
    // Three of the portfolio, fifty names, and the others together.
    EXPECT_EQ(verdict.checks.size(), 3 + model::checked_names + 1);
}

TEST(Verdict, DiffersWhereOneLargeNameIsOff) {
    Both both = lender();
    constexpr auto contribution = &model::NameFigures::es_contribution;
    auto const largest = std::ranges::max_element(both.engine.names, {}, contribution);
    (*largest).es_contribution *= 1.2;
    auto const at = static_cast<std::size_t>(largest - both.engine.names.begin());
    auto const verdict = both.verdict();
    EXPECT_FALSE(verdict.agrees());
    for (auto const& check : verdict.checks)
        EXPECT_EQ(check.agrees, check.counterparty_id != both.names[at]->counterparty_id)
            << check.what;
}

// A wrong correlation of one sector's small names shows in no single one of them.
TEST(Verdict, DiffersWhereASectorOfSmallNamesIsOff) {
    Both both = lender();
    for (std::size_t i = 200; i < both.names.size(); ++i)
        if (both.names[i]->sector == "RETAIL") both.engine.names[i].es_contribution *= 1.5;
    auto const verdict = both.verdict();
    EXPECT_FALSE(verdict.checks.back().agrees) << verdict.checks.back().false_alarm;
}

TEST(Verdict, DiffersWhereATotalIsOffOrNoNumber) {
    Both both = lender();
    auto const totals = both.engine.totals;
    both.engine.totals.expected_loss *= 1.0001;
    EXPECT_FALSE(both.verdict().checks[0].agrees);
    both.engine.totals = totals;
    both.engine.totals.loss_quantile *= 1.1;
    EXPECT_FALSE(both.verdict().checks[1].agrees);
    both.engine.totals.loss_quantile = std::numeric_limits<double>::quiet_NaN();
    EXPECT_FALSE(both.verdict().checks[1].agrees);
}

// Right figures must pass whatever the judge draws: the chi squared value over its mean stays near
// 1, and no seed of ten is called a difference.
TEST(Verdict, AgreesForAnySeedOfTheJudge) {
    Both both = lender();
    double ratio = 0.0;
    constexpr int seeds = 10;
    for (int seed = 1; seed <= seeds; ++seed) {
        both.judge = model::judge(both.names, both.settings,
                                  {.scenarios = 20'000,
                                   .seed = static_cast<std::uint64_t>(seed),
                                   .mode = model::JudgePlan::Mode::shifted,
                                   .sharpened = 2 * model::checked_names},
                                  0);
        auto const verdict = both.verdict();
        EXPECT_TRUE(verdict.agrees()) << told(verdict);
        ratio += verdict.checks.back().engine / verdict.checks.back().judge / seeds;
    }
    EXPECT_GT(ratio, 0.6);
    EXPECT_LT(ratio, 1.4);
}

TEST(Verdict, AgreesOnBooksThatAreAlmostNothing) {
    auto const settings = tests::one_index({0.01}, 0.2);
    EXPECT_TRUE((Both{settings, {}}.verdict().agrees()));
    EXPECT_TRUE((Both{settings, {tests::name(0, 100.0, 45.0)}}.verdict().agrees()));
    EXPECT_TRUE((Both{settings, {tests::name(1, 100.0, 45.0)}}.verdict().agrees()));
    tests::Names hundred(100, tests::name(0, 1.0, 1.0));
    Both const lumpy{settings, hundred};
    EXPECT_TRUE(lumpy.verdict().agrees()) << told(lumpy.verdict());
}

TEST(Verdict, AgreesWhereGradesHaveValues) {
    Both const both{tests::revalued_lender_settings(), tests::lender(150)};
    EXPECT_TRUE(both.verdict().agrees()) << told(both.verdict());
}

}  // namespace
