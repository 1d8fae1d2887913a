#include "alerts/life.hpp"

#include <gtest/gtest.h>

#include <map>
#include <set>
#include <sstream>

namespace alerts {
namespace {

// A story told as the desk would: one limit, one subject, a row a day.
//
//   observed, breach, warning, error   the measure and the levels; "-" for none
//   held                               the reason, or "-"
//   limit                              "-", "edited" (the file changed that day), "gone"; "out":
//   the
//                                      subject is out of scope
//   waiver                             level:last day, or "-"
//   desk                               what a person does before the turn: "ack:last day", "back"
//   state, severity, events            what the turn leaves; events joined by "+", "-" for none
class Story {
public:
    explicit Story(double cure_margin) : cure_margin_{cure_margin} {}

    void tell(std::string const& text) {
        std::istringstream lines{text};
        std::string line;
        std::vector<std::string> header;
        while (std::getline(lines, line)) {
            std::istringstream words{line};
            std::vector<std::string> cells{std::istream_iterator<std::string>{words}, {}};
            if (cells.empty()) continue;
            if (header.empty()) {
                header = cells;
                continue;
            }
            ASSERT_EQ(cells.size(), header.size()) << line;
            std::map<std::string, std::string> row;
            for (std::size_t i = 0; i < header.size(); ++i) row[header[i]] = cells[i];
            turn(row, line);
        }
    }

    static std::set<int> rows_seen;

private:
    static bool is_none(std::map<std::string, std::string> const& row, std::string const& key) {
        return !row.contains(key) || row.at(key) == "-";
    }
    static std::optional<double> number(std::map<std::string, std::string> const& row,
                                        std::string const& key) {
        return is_none(row, key) ? std::nullopt : std::optional{std::stod(row.at(key))};
    }
    static model::Day day(int number) { return model::Day{std::chrono::days{20'000 + number}}; }

    void act(std::string const& desk) {
        ASSERT_TRUE(alert_);
        if (desk == "back") {
            alert_->state = State::open;
            alert_->due_at.reset();
        } else {
            alert_->state = State::acknowledged;
            alert_->due_at = day(std::stoi(desk.substr(4)) + 1);
            alert_->acknowledged_observed = alert_->observed;
        }
        ++alert_->row_version;
    }

    void turn(std::map<std::string, std::string> const& row, std::string const& line) {
        SubjectKey const key{"L1", SubjectKind::name, "C1"};
        int const today = std::stoi(row.at("day"));
        if (!is_none(row, "desk")) act(row.at("desk"));

        Checks checks;
        std::string const limit = is_none(row, "limit") ? "" : row.at("limit");
        if (auto const observed = number(row, "observed"))
            checks.usages.push_back({.key = key,
                                     .measure = Measure::exposure,
                                     .observed = *observed,
                                     .observed_error = number(row, "error").value_or(0.0),
                                     .warning_level = number(row, "warning"),
                                     .breach_level = number(row, "breach"),
                                     .cure_margin = cure_margin_,
                                     .held = is_none(row, "held")
                                                 ? model::Held::no
                                                 : *find(held_words, row.at("held"))});
        Limits limits;
        if (limit != "gone") limits.emplace_back().limit_id = "L1";
        std::vector<Waiver> waivers;
        if (!is_none(row, "waiver")) {
            auto const& text = row.at("waiver");
            auto const colon = text.find(':');
            waivers.push_back({key, std::stod(text.substr(0, colon)), day(0),
                               day(std::stoi(text.substr(colon + 1)))});
        }
        std::vector<Alert> live;
        if (alert_) live.push_back(*alert_);
        auto const outcomes = advance({.alerts = live,
                                       .checks = checks,
                                       .checks_before = before_ ? &*before_ : nullptr,
                                       .limits = limits,
                                       .limits_changed = limit == "edited" || limit == "gone",
                                       .waivers = waivers,
                                       .as_of = {day(today), day(today)}});
        ASSERT_LE(outcomes.size(), 1U);
        std::string events;
        State state = alert_ ? alert_->state : State::none;
        Severity severity = alert_ ? alert_->severity : Severity::warning;
        if (!outcomes.empty()) {
            auto const& outcome = outcomes.front();
            for (auto const& move : outcome.moves) {
                rows_seen.insert(move.transition->row);
                events += (events.empty() ? "" : "+") +
                          std::string{word(event_words, move.transition->event)};
            }
            state = outcome.alert.state;
            severity = outcome.alert.severity;
            if (state == State::cured || state == State::withdrawn) {
                alert_.reset();
            } else {
                alert_ = outcome.alert;
                alert_->alert_id = 1;
            }
        }
        before_ = checks;
        EXPECT_EQ(word(state_words, state), row.at("state")) << line;
        if (!is_none(row, "severity")) {
            EXPECT_EQ(word(severity_words, severity), row.at("severity")) << line;
        }
        EXPECT_EQ(events.empty() ? "-" : events, row.at("events")) << line;
    }

    double cure_margin_;
    std::optional<Alert> alert_;
    std::optional<Checks> before_;
};

std::set<int> Story::rows_seen;

TEST(Life, OpensAboveTheLevelAndCuresAtItsRelease) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  state  severity  events
        1          85       85     100  none          -  -
        2          86       85     100  open    warning  opened
        3         100       85     100  open    warning  -
        4         101       85     100  open     breach  raised
        5          96       85     100  open     breach  -
        6          95       85     100  open    warning  eased
        7          81       85     100  open    warning  -
        8        80.7       85     100  cured         -  cured
        9         120       85     100  open     breach  opened
    )");
}

TEST(Life, AWarningThatJumpsToTheBreachOpensAsABreach) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  state  severity  events
        1          50       85     100  none          -  -
        2         150       85     100  open     breach  opened
        3          10       85     100  cured         -  cured
    )");
}

TEST(Life, AnAcknowledgementEndsWhenItIsDue) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  desk   state         severity  events
        1         110       85     100  -      open            breach  opened
        2         110       85     100  ack:4  acknowledged    breach  -
        4         109       85     100  -      acknowledged    breach  -
        5         109       85     100  -      open            breach  due
    )");
}

TEST(Life, AnAcknowledgementIsForWhatWasSeen) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  desk   state         severity  events
        1          90       85     100  -      open           warning  opened
        2          90       85     100  ack:9  acknowledged   warning  -
        3          99       85     100  -      acknowledged   warning  -
        4         101       85     100  -      open            breach  worse
        5         101       85     100  ack:9  acknowledged    breach  -
        6         110       85     100  -      acknowledged    breach  -
        7         111       85     100  -      open            breach  worse
        8         111       85     100  ack:9  acknowledged    breach  -
        9         111       85     100  back   open            breach  -
    )");
}

TEST(Life, ALevelOfNothingIsOverByAnythingAndClearAtNothing) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  desk   state         severity  events
        1           0        0       0  -      none                 -  -
        2         100        0       0  -      open            breach  opened
        3         100        0       0  ack:9  acknowledged    breach  -
        4         109        0       0  -      acknowledged    breach  -
        5         110        0       0  -      open            breach  worse
        6           1        0       0  -      open            breach  -
        7           0        0       0  -      cured                -  cured
    )");
}

TEST(Life, WhatIsHeldMayWorsenButNeitherEasesNorEnds) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  held           limit   state  severity  events
        1         110       85     100  -              -       open     breach  opened
        2          90       85     100  row_set_aside  -       open     breach  -
        3          10       85     100  rate_missing   -       open     breach  -
        4          10       85     400  rate_old       edited  open     breach  -
        5           -        -       -  -              gone    withdrawn     -  withdrawn
        6         110       85     100  rate_old       -       open     breach  opened
        7          90       85     100  -              -       open    warning  eased
        8          10       85     100  -              -       cured         -  cured
    )");
}

TEST(Life, WithoutALevelNothingMoves) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  held           state  severity  events
        1         110       85     100  -              open     breach  opened
        2           5        -       -  level_unknown  open     breach  -
        3         500        -       -  level_unknown  open     breach  -
    )");
}

TEST(Life, ALevelRaisedInTheFileIsNoCure) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  limit   state      severity  events
        1         110       85     100  -       open         breach  opened
        2         110      170     200  edited  withdrawn         -  withdrawn
        3         190      170     200  -       open        warning  opened
        4          20      200     300  edited  cured             -  cured
    )");
}

TEST(Life, AMeasureThatFallsWithTheLevelUnchangedIsACure) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  limit   state  severity  events
        1         110       85     100  -       open     breach  opened
        2          10       85     100  edited  cured         -  cured
    )");
}

TEST(Life, ARemovedLimitAndASubjectOutOfScopeAreWithdrawn) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  limit  state      severity  events
        1         110       85     100  -      open         breach  opened
        2         110       85     100  gone   withdrawn         -  withdrawn
        3         110       85     100  -      open         breach  opened
        4           -        -       -  out    withdrawn         -  withdrawn
    )");
}

TEST(Life, AWaiverCoversUpToItsLevelAndTime) {
    Story{0.05}.tell(R"(
        day  observed  warning  breach  waiver  desk   state         severity  events
        1         110       85     100  150:4   -      waived          breach  waived
        2         151       85     100  150:4   -      open            breach  waiver_exceeded
        3         140       85     100  150:4   -      waived          breach  waived
        5         140       85     100  150:4   -      open            breach  waiver_ended
        6         140       85     100  -       ack:9  acknowledged    breach  -
        7         140       85     100  150:8   -      waived          breach  waived
        8          10       85     100  150:8   -      cured                -  cured
    )");
}

TEST(Life, AnUncertainFigureNeitherOpensNorCuresWithinItsError) {
    Story{0.05}.tell(R"(
        day  observed  error  warning  breach  state  severity  events
        1         105      2      -       100  none          -  -
        2         107      2      -       100  open     breach  opened
        3          93      2      -       100  open     breach  -
        4          89      2      -       100  cured         -  cured
    )");
}

TEST(Life, NoiseDoesNotCountAsWorse) {
    Story{0.05}.tell(R"(
        day  observed  error  warning  breach  desk   state         events
        1         150      5      -       100  -      open          opened
        2         150      5      -       100  ack:9  acknowledged  -
        3         170      5      -       100  -      acknowledged  -
        4         182      5      -       100  -      open          worse
    )");
}

// Runs last in this file: the stories above have taken every row but the two a person makes.
TEST(LifeTable, HasEveryRowToldInAStory) {
    std::set<int> rows = Story::rows_seen;
    EXPECT_EQ(rows, (std::set<int>{1, 2, 4, 5, 7, 8, 9, 10, 11, 12, 13, 14}));
}

TEST(LifeTable, ReadsAsAgreed) {
    EXPECT_EQ(life_table(),
              " 1 | none cured withdrawn | opened | open | level exceeded\n"
              " 2 | none cured withdrawn | waived | waived | level exceeded under a waiver\n"
              " 3 | open | acknowledged | acknowledged | taken up by the desk\n"
              " 4 | acknowledged | due | open | acknowledged until now\n"
              " 5 | acknowledged | worse | open | worse than when it was taken up\n"
              " 6 | acknowledged | taken_back | open | acknowledgement taken back\n"
              " 7 | open | raised | open | the warning became a breach\n"
              " 8 | open acknowledged | eased | as it was unless held | back below the breach "
              "level's release\n"
              " 9 | open acknowledged | waived | waived | a waiver covers it\n"
              "10 | waived | waiver_exceeded | open | over the waiver's level\n"
              "11 | waived | waiver_ended | open | the waiver ended, still over\n"
              "12 | open acknowledged waived | cured | cured unless held | back below the release "
              "of every level\n"
              "13 | open acknowledged waived | withdrawn | withdrawn unless held | level_raised\n"
              "14 | open acknowledged waived | withdrawn | withdrawn | limit_removed\n"
              "14 | open acknowledged waived | withdrawn | withdrawn | out_of_scope\n");
}

}  // namespace
}  // namespace alerts
