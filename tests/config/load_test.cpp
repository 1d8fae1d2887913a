#include "config/load.hpp"

#include "tests/config/marked.hpp"

#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <cmath>
#include <filesystem>
#include <fstream>
#include <random>
#include <sstream>
#include <string>
#include <variant>
#include <vector>

namespace {

using alerts::Limit;
using alerts::Measure;
using alerts::ShareOf;
using alerts::SubjectKind;
using alerts::Total;
using config::Rules;
using testing::ElementsAre;
using testing::IsEmpty;
using testing::Pair;
using testing::UnorderedElementsAre;

// A small folder that is good; each test spoils a part of it.
config::Files const good{
    {"service.yaml", "# every key has a default\n"},
    {"model.yaml", R"(base_currency: EUR
horizon_years: 1
confidence: 0.999
loss: default_only
grades: [A, B]
transition_matrix: transition.csv
loss_given_default: 0.45
conversion_factor: {revolver: 0.5, others: 1.0}
systematic_indices: indices.csv
index_weights: {sector: 0.8, country: 0.2}
asset_correlation: 0.20
rating_sources: [internal]
rating_max_age_days: 550
unrated_as: B
fx_max_age_days: 5
simulation: {scenarios: 1000, seed: 1}
)"},
    {"transition.csv", "from,A,B,default\nA,0.9,0.09,0.01\nB,0.1,0.8,0.1\n"},
    {"indices.csv",
     "index,sector:others,country:others\n"
     "sector:others,1,0.5\n"
     "country:others,0.5,1\n"},
    {"limits.yaml", "limits:\n- {id: one, per: name, measure: exposure, breach_at: EUR 1 m}\n"},
};

std::string read(std::filesystem::path const& path) {
    std::ostringstream text;
    text << std::ifstream{path, std::ios::binary}.rdbuf();
    return text.str();
}

std::variant<Rules, std::vector<config::Fault>> load(config::Files const& files) {
    std::string name = "/tmp/loadline-load-XXXXXX";
    std::filesystem::path const folder = mkdtemp(name.data());
    for (auto const& [file, text] : files) std::ofstream{folder / file, std::ios::binary} << text;
    auto result = config::load(folder);
    std::filesystem::remove_all(folder);
    return result;
}

std::vector<std::string> faults(config::Files const& files) {
    auto const result = load(files);
    std::vector<std::string> texts;
    if (auto const* const faults = std::get_if<std::vector<config::Fault>>(&result))
        for (auto const& fault : *faults) texts.push_back(fault.text());
    return texts;
}

Rules rules(config::Files const& files) {
    auto const result = load(files);
    EXPECT_THAT(faults(files), IsEmpty());
    return std::holds_alternative<Rules>(result) ? std::get<Rules>(result) : Rules{};
}

config::Files with(std::string const& file, std::string const& text) {
    auto files = good;
    files[file] = text;
    return files;
}

// Holds a file, given with marks, to the faults at the marks; see tests/config/marked.hpp.
void expect_faults(std::string const& file, std::string_view with_marks,
                   std::vector<std::string> const& what) {
    auto const marked = tests::marked(with_marks);
    EXPECT_EQ(faults(with(file, marked.text)), tests::at_marks(file, marked, what)) << marked.text;
}

// The same for the good model.yaml, in which one key has another value, or none.
void expect_model_faults(std::string const& key, std::string_view value,
                         std::vector<std::string> const& what) {
    auto text = good.at("model.yaml");
    auto const start = text.find("\n" + key + ":") == std::string::npos
                           ? text.find(key + ":")
                           : text.find("\n" + key + ":") + 1;
    if (start == std::string::npos)
        text += std::string{value};
    else
        text.replace(start, text.find('\n', start) + 1 - start, value);
    expect_faults("model.yaml", text, what);
}

// The same for a limit written on one line.
void expect_limit_faults(std::string_view limit, std::vector<std::string> const& what) {
    expect_faults("limits.yaml", "limits:\n- " + std::string{limit} + "\n", what);
}

Limit limit(std::string_view text) {
    auto const limits = rules(with("limits.yaml", "limits:\n- " + std::string{text} + "\n")).limits;
    return limits && limits->size() == 1 ? limits->front() : Limit{};
}

alerts::Level money(double units) {
    return *model::Money::from_units(units);
}

alerts::LevelRule flat(alerts::Level level) {
    return {.by = {}, .levels = {{"", level}}, .others = {}};
}

TEST(Load, TakesTheShippedFolder) {
    auto const result = config::load(std::string{LOADLINE_SOURCE} + "/config");
    ASSERT_TRUE(std::holds_alternative<Rules>(result));
    auto const& rules = std::get<Rules>(result);
    EXPECT_EQ(rules.service.time_zone, "Europe/Vienna");
    EXPECT_EQ(rules.model->grades.size(), 7U);
    EXPECT_EQ(rules.model->indices.names.size(), 19U);
    EXPECT_GE(rules.limits->size(), 8U);
}

// The digests are of these texts.
TEST(Load, KeepsTheExactBytesOfEveryFile) {
    auto files = good;
    files["service.yaml"] = "# ü \t\r\n\n";
    auto const loaded = rules(files);
    EXPECT_THAT(loaded.service_files, ElementsAre(Pair("service.yaml", files["service.yaml"])));
    EXPECT_THAT(loaded.limits_files, ElementsAre(Pair("limits.yaml", files["limits.yaml"])));
    EXPECT_THAT(loaded.model_files,
                UnorderedElementsAre(Pair("model.yaml", files["model.yaml"]),
                                     Pair("transition.csv", files["transition.csv"]),
                                     Pair("indices.csv", files["indices.csv"])));
}

TEST(Load, NamesEveryMistakeOfEveryFileAtOnceInTheOrderOfTheFiles) {
    config::Files files{
        {"service.yaml", "pol: 1 s\nthreads: 0\n"},
        {"model.yaml", R"(base_currency: EUR
horizon_years: 010
confidence: .nan
loss: &anchor default_only
grades: [A, B]
transition_matrix: transition.csv
loss_given_default: 0.45
conversion_factor: {revolver: 0.5, others: 1.0}
systematic_indices: indices.csv
index_weights: {sector: 0.8, country: 0.2}
asset_correlation: 0.20
rating_sources: [internal]
rating_max_age_days: 550
unrated_as: B
fx_max_age_days: 5
fx_max_age_days: 6
simulation: {scenarios: 1000, seed: 1}
)"},
        {"transition.csv", "from,A,B,default\nA,0.9,0.09,0.02\nB,0.1,0.8,0.1\n"},
        {"indices.csv",
         "index,sector:others,country:others\n"
         "sector:others,1,0.5\n"
         "country:others,0.4,1\n"},
        {"limits.yaml", R"(limits:
- {id: one, per: name, mesure: exposure, breach_at: EUR 1 m}
- {id: two, per: name, measure: exposure, breach_at: {by: grade, A: EUR 1 m, B: EUR 2 m}}
- {id: three, per: name, measure: weight, breach_at: EUR 1 m}
---
limits: []
)"},
    };
    std::string const keys =
        "one of id, per, measure, across, where, cure_margin, owner, acknowledge_for, act, "
        "breach_at or warning_at";
    std::string const measures =
        "one of exposure, commitment, expected_loss, var_contribution, es_contribution, "
        "default_probability, downgrade_probability or concentration_index";
    EXPECT_THAT(
        faults(files),
        ElementsAre(
            "service.yaml:1:1: unknown key 'pol', expected one of database, time_zone, poll, "
            "threads or log (did you mean 'poll'?)",
            "service.yaml:2:10: '0', expected a whole number from 1 to 1024",
            "model.yaml:2:16: '010', expected a whole number from 1 to 50",
            "model.yaml:3:13: '.nan' is no plain number, expected a number between 0.5 and 1 such "
            "as 0.999",
            "model.yaml:4:7: the anchor '&anchor', expected every value written out where it is "
            "used",
            "model.yaml:16:1: the key 'fx_max_age_days' stands twice, first at 15:1, expected "
            "each key once",
            "transition.csv:2:1: the row sums to 1.01, expected 1, within 0.0002",
            "indices.csv:3:16: 0.4 here, but 0.5 for the same pair at 2:17, expected the same "
            "correlation both ways",
            "limits.yaml:2:3: a key is missing, expected 'measure'",
            "limits.yaml:2:24: unknown key 'mesure', expected " + keys +
                " (did you mean 'measure'?)",
            "limits.yaml:3:54: no level for default, expected a level for every grade and "
            "default, or 'others'",
            "limits.yaml:4:35: unknown word 'weight', expected " + measures,
            "limits.yaml:5:1: a second document begins, expected one document a file, its keys "
            "all at the same indentation"));
}

TEST(Load, NamesEveryMissingFile) {
    auto const result = config::load("/nonexistent");
    std::vector<std::string> texts;
    for (auto const& fault : std::get<1>(result)) texts.push_back(fault.text());
    auto const missing = [](std::string const& name) {
        return name +
               ": the file is missing, expected it in /nonexistent; start from the example "
               "of that name";
    };
    EXPECT_THAT(
        texts, ElementsAre(missing("service.yaml"), missing("model.yaml"), missing("limits.yaml")));
}

// A model.yaml that is no longer readable must not bury the mistakes of limits.yaml under others.
TEST(Load, RaisesNoFaultThatFollowsFromAnother) {
    auto files = good;
    files["model.yaml"] = "a: [\n";
    auto const limits = tests::marked(
        "limits:\n"
        "- {id: a, per: name, measure: exposure, breach_at: {by: grade, X: CHF 1 m}}\n"
        "- {id: b, per: grade, measure: exposure, where: {grade: Y or worse}, breach_at: ^7}\n");
    files["limits.yaml"] = limits.text;
    EXPECT_THAT(faults(files),
                ElementsAre(testing::StartsWith("model.yaml:2:1: not readable as YAML"),
                            testing::StartsWith(tests::at_marks(
                                "limits.yaml", limits, {"'7' is no level of exposure"})[0])));
    EXPECT_THAT(faults(with("limits.yaml", "limits: &x [*x]\n")), testing::SizeIs(2));
}

// Whatever becomes of a file, loading it ends with rules or with faults that name a file.
TEST(Load, SurvivesDamage) {
    std::filesystem::path const shipped = std::string{LOADLINE_SOURCE} + "/config";
    config::Files files;
    for (auto const& [name, text] : good) files[name] = read(shipped / name);
    std::mt19937 random{20260331};  // any fixed number
    auto const below = [&](std::size_t bound) { return random() % bound; };
    std::string const alphabet = "\n\r\t \"'[]{}:,-#&*!|>%@?.0159aeG\xC3\x80";
    int found = 0;
    for (int i = 0; i < 500; ++i) {
        auto damaged = files;
        auto const victim = std::next(damaged.begin(), static_cast<long>(below(damaged.size())));
        auto& text = victim->second;
        for (std::size_t edits = 1 + below(3); edits > 0 && !text.empty(); --edits) {
            auto const at = below(text.size());
            switch (below(4)) {
                case 0:
                    text.resize(at);
                    break;
                case 1:
                    text.erase(at, 1 + below(8));
                    break;
                case 2:
                    text.insert(at, 1, alphabet[below(alphabet.size())]);
                    break;
                default:
                    text[at] = alphabet[below(alphabet.size())];
            }
        }
        for (auto const& fault : faults(damaged)) {
            ++found;
            EXPECT_THAT(fault, testing::ContainsRegex("^.+(:[0-9]+:[0-9]+)?: .+"));
        }
    }
    EXPECT_GT(found, 200);
}

TEST(Service, HasADefaultForEveryKey) {
    EXPECT_EQ(rules(good).service, config::Service{});
    auto const service = rules(with("service.yaml",
                                    "database: host=/run/pg dbname=risk\ntime_zone: Europe/Prague\n"
                                    "poll: 2 s\nthreads: 3\nlog: debug\n"))
                             .service;
    EXPECT_EQ(service, (config::Service{.database = "host=/run/pg dbname=risk",
                                        .time_zone = "Europe/Prague",
                                        .poll = std::chrono::seconds{2},
                                        .threads = 3,
                                        .log = "debug"}));
    EXPECT_EQ(rules(with("service.yaml", "threads: all\n")).service.threads, 0U);
}

TEST(Service, RefusesWhatItDoesNotKnow) {
    auto const poll = [](std::string const& text) {
        return "'" + text + "', expected a time from 10 ms to 60 s such as 100 ms or 1 s";
    };
    for (std::string const text : {"9 ms", "61 s", "100", "0.5 s", "1s", "100 MS", "-1 s", "010 ms",
                                   "99999999999999999999 s", "18446744073709561 ms"})
        expect_faults("service.yaml", "poll: ^" + text + "\n", {poll(text)});
    expect_faults("service.yaml", "time_zone: ^Europe/Wien\n",
                  {"unknown time zone 'Europe/Wien', expected a name of the tz database such as "
                   "Europe/Vienna"});
    expect_faults("service.yaml", "threads: ^1025\n",
                  {"'1025', expected a whole number from 1 to 1024"});
    expect_faults("service.yaml", "log: ^warn\n",
                  {"unknown word 'warn', expected one of trace, debug, info, warning or error"});
    expect_faults("service.yaml", "^database:\n", {"no value, expected a libpq connection string"});
    expect_faults("service.yaml", "^listen: 80\n^inputs: {}\n^business_day: {}\n",
                  {"'listen' is not yet available", "'inputs' is not yet available",
                   "'business_day' is not yet available"});
    expect_faults("service.yaml", "^- a\n", {"a list, expected keys and values"});
    expect_faults("service.yaml", "^poll\n", {"'poll', expected keys and values"});
}

TEST(Model, IsReadWhole) {
    auto files = good;
    auto& text = files["model.yaml"];
    auto const replace = [&](std::string const& from, std::string const& to) {
        text.replace(text.find(from), from.size(), to);
    };
    replace("horizon_years: 1", "horizon_years: 3");
    replace("default_only", "revaluation\ngrade_values: values.csv");
    replace("0.45", "0.4\nloss_given_default_deviation: 0.25");
    replace("asset_correlation: 0.20", "asset_correlation: {A: 0.24, B: 0.12}");
    replace("[internal]", "[internal, agency]");
    replace("{scenarios: 1000, seed: 1}", "{scenarios: 100000000, seed: 0}");
    files["values.csv"] = "from,A,B\nA,0,0.02\nB,-0.01,0\n";
    auto const model = rules(files).model;
    ASSERT_TRUE(model);
    EXPECT_EQ(model->base_currency, "EUR");
    EXPECT_EQ(model->horizon_years, 3);
    EXPECT_EQ(model->confidence, 0.999);
    EXPECT_EQ(model->loss, model::LossKind::revaluation);
    EXPECT_EQ(model->grades, model::GradeScale({"A", "B"}));
    EXPECT_EQ(model->transition, (Eigen::MatrixXd{{0.9, 0.09, 0.01}, {0.1, 0.8, 0.1}}));
    EXPECT_EQ(model->grade_values, (Eigen::MatrixXd{{0, 0.02}, {-0.01, 0}}));
    EXPECT_EQ(model->loss_given_default.value(), 0.4);
    EXPECT_EQ(model->loss_given_default_deviation, 0.25);
    EXPECT_EQ(model->conversion_factor.at("revolver").value(), 0.5);
    EXPECT_EQ(model->conversion_factor.at("others").value(), 1.0);
    EXPECT_THAT(model->indices.names, ElementsAre("sector:others", "country:others"));
    EXPECT_EQ(model->indices.correlation, (Eigen::MatrixXd{{1, 0.5}, {0.5, 1}}));
    EXPECT_EQ(model->index_weights.all, 0.0);
    EXPECT_EQ(model->index_weights.sector, 0.8);
    EXPECT_EQ(model->index_weights.country, 0.2);
    EXPECT_THAT(model->asset_correlation, ElementsAre(0.24, 0.12));
    EXPECT_THAT(model->rating_sources, ElementsAre("internal", "agency"));
    EXPECT_EQ(model->rating_max_age_days, 550);
    EXPECT_EQ(model->unrated_as, model::Grade{1});
    EXPECT_EQ(model->fx_max_age_days, 5);
    EXPECT_EQ(model->simulation, (model::SimulationPlan{100'000'000, 0}));
    EXPECT_THAT(rules(good).model->asset_correlation, ElementsAre(0.2, 0.2));
}

TEST(Model, NeedsEveryKeyButThoseOfRevaluationAndScatter) {
    auto const root = good.at("model.yaml");
    for (std::string const key :
         {"base_currency", "horizon_years", "confidence", "loss", "grades", "transition_matrix",
          "loss_given_default", "conversion_factor", "systematic_indices", "index_weights",
          "asset_correlation", "rating_sources", "rating_max_age_days", "unrated_as",
          "fx_max_age_days", "simulation"}) {
        auto text = root;
        auto const start = key == "base_currency" ? 0 : text.find("\n" + key + ":") + 1;
        text.erase(start, text.find('\n', start) + 1 - start);
        expect_faults("model.yaml", "^" + text, {"a key is missing, expected '" + key + "'"});
    }
}

TEST(Model, RefusesWhatIsOutOfItsDomain) {
    auto const not_whole = [](std::string const& text) {
        return "'" + text + "', expected a whole number from 1 to 50";
    };
    for (std::string const text : {"0", "51", "-1", "1e0", "010", "0x10", "1_0", "one", "1.0"})
        expect_model_faults("horizon_years", "horizon_years: ^" + text + "\n", {not_whole(text)});
    expect_model_faults("horizon_years", "horizon_years: ^0.5\n",
                        {"a horizon of part years is not yet available, expected a whole number "
                         "from 1 to 50"});
    expect_model_faults("horizon_years", "horizon_years: ^\"1\"\n",
                        {"'1' in quotes is text, expected a whole number from 1 to 50"});

    std::string const confidence = ", expected a number between 0.5 and 1 such as 0.999";
    auto const is = [&](std::string const& text, std::string const& what) {
        return "'" + text + "' is " + what + confidence;
    };
    for (std::string const text : {"0.5", "1", "1.5", "-0.9"})
        expect_model_faults("confidence", "confidence: ^" + text + "\n",
                            {is(text, "out of range")});
    for (std::string const text : {"99.9%", "0,999", ".999", ".nan", ".inf", "1e999", "+0.9"})
        expect_model_faults("confidence", "confidence: ^" + text + "\n",
                            {is(text, "no plain number")});
    expect_model_faults("confidence", "confidence: ^'0.999'\n",
                        {"'0.999' in quotes is text" + confidence});
    expect_model_faults("confidence", "confidence: ^~\n", {"no value" + confidence});
    expect_model_faults("confidence", "confidence: ^[0.9]\n", {"a list" + confidence});

    for (std::string const text : {"eur", "EURO", "E1R", "''"})
        expect_model_faults(
            "base_currency", "base_currency: ^" + text + "\n",
            {(text == "''" ? text : "'" + text + "'") + ", expected an ISO 4217 code such as EUR"});
    expect_model_faults("loss", "loss: ^both\n",
                        {"unknown word 'both', expected one of default_only or revaluation"});
    std::string const fraction = " is out of range, expected a number from 0 to 1";
    expect_model_faults("loss_given_default", "loss_given_default: ^1.1\n", {"'1.1'" + fraction});
    expect_model_faults("conversion_factor", "conversion_factor: {others: 1, x: ^-0.1}\n",
                        {"'-0.1'" + fraction});
    expect_model_faults("conversion_factor", "conversion_factor: ^{revolver: 0.5}\n",
                        {"no factor for products that are not listed, expected 'others'"});
    std::string const correlation = ", expected a number from 0 to 0.99, or one for each grade";
    expect_model_faults("asset_correlation", "asset_correlation: ^0.991\n",
                        {"'0.991' is out of range" + correlation});
    expect_model_faults("asset_correlation", "asset_correlation: ^{A: 0.1, ^C: 0.1}\n",
                        {"a key is missing, expected 'B'",
                         "unknown key 'C', expected one of A or B (did you mean 'A'?)"});
    expect_model_faults("rating_max_age_days", "rating_max_age_days: ^-1\n",
                        {"'-1', expected a whole number from 0 to 36500"});
    expect_model_faults("fx_max_age_days", "fx_max_age_days: ^5 days\n",
                        {"'5 days', expected a whole number from 0 to 36500"});
    expect_model_faults("unrated_as", "unrated_as: ^default\n",
                        {"unknown word 'default', expected one of A or B"});
    expect_model_faults("rating_sources", "rating_sources: ^[]\n",
                        {"an empty list, expected a rating source"});
    expect_model_faults("rating_sources", "rating_sources: [a, ^a]\n",
                        {"'a' stands twice, expected each once"});
    expect_model_faults("rating_sources", "rating_sources: ^internal\n",
                        {"'internal', expected rating sources, the first that has a rating wins"});
    expect_model_faults("simulation", "simulation: {scenarios: ^999, seed: ^-1, ^threads: 2}\n",
                        {"'999', expected a whole number from 1000 to 100000000",
                         "'-1', expected a whole number from 0 to 9223372036854775807",
                         "unknown key 'threads', expected one of scenarios or seed"});
    expect_model_faults("simulation", "simulation: {scenarios: ^100000001, seed: 1}\n",
                        {"'100000001', expected a whole number from 1000 to 100000000"});
}

TEST(Model, NeedsAScaleOfDistinctGrades) {
    expect_model_faults("grades", "grades: ^[]\n", {"an empty list, expected a grade"});
    expect_model_faults("grades", "grades: [A, ^A]\n", {"'A' stands twice, expected each once"});
    for (std::string const word : {"default", "withdrawn", "unknown", "others", "by"})
        expect_model_faults("grades", "grades: [A, ^" + word + "]\n",
                            {"the reserved word '" + word + "', expected a grade"});
    expect_model_faults("grades", "grades: [A, ^'x,y', ^' x', ^'']\n",
                        {"'x,y', expected a grade without a comma, a line break or a blank at its "
                         "ends",
                         "' x', expected a grade without a comma, a line break or a blank at its "
                         "ends",
                         "'', expected a grade without a comma, a line break or a blank at its "
                         "ends"});
    std::string many = "grades: ^[G0";
    for (int i = 1; i <= 50; ++i) many += ", G" + std::to_string(i);
    expect_model_faults("grades", many + "]\n", {"51 grades, expected at most 50"});
}

// A beta distribution on [0, 1] with that mean and deviation must exist.
TEST(Model, BoundsTheScatterOfRecoveries) {
    expect_model_faults("loss_given_default",
                        "loss_given_default: 0.5\nloss_given_default_deviation: ^0.5\n",
                        {"a deviation of 0.5 with a mean of 0.5, expected 0, or less than 0.5"});
    expect_model_faults("loss_given_default",
                        "loss_given_default: 0.5\nloss_given_default_deviation: 0.499\n", {});
    expect_model_faults("loss_given_default",
                        "loss_given_default: 1\nloss_given_default_deviation: 0\n", {});
    expect_model_faults("loss_given_default",
                        "loss_given_default: 0.5\nloss_given_default_deviation: ^-0.1\n",
                        {"'-0.1' is out of range, expected a number from 0 to 1"});
}

TEST(Model, TakesGradeValuesWithRevaluationOnly) {
    expect_model_faults("loss", "loss: ^revaluation\n",
                        {"revaluation without values, expected the key 'grade_values'"});
    expect_model_faults("loss", "loss: default_only\n^grade_values: transition.csv\n",
                        {"'grade_values' has no effect with default_only, expected loss: "
                         "revaluation, or this key left out"});
}

TEST(Model, TakesSideFilesOfItsFolderAlone) {
    for (std::string const name :
         {"/etc/passwd", "../transition.csv", "..", ".", "a/b.csv", "a\\b.csv", ".hidden", "''"})
        expect_model_faults("transition_matrix", "transition_matrix: ^" + name + "\n",
                            {(name == "''" ? name : "'" + name + "'") +
                             ", expected the name of a file in the same folder"});
    auto files = good;
    files.erase("transition.csv");
    EXPECT_THAT(faults(files),
                ElementsAre(testing::StartsWith("transition.csv: the file is missing, expected")));
}

TEST(Transition, IsHeldToItsHeaderAndRows) {
    std::string const header = ", expected the header from,A,B,default";
    auto const expect = [](std::string_view text, std::vector<std::string> const& what) {
        expect_faults("transition.csv", text, what);
    };
    expect("from,^B,A,default\nA,0.9,0.09,0.01\nB,0.1,0.8,0.1\n", {"the column 'B'" + header});
    expect("from,A,^B\nA,0.9,0.09\nB,0.1,0.8\n", {"a header of 3 columns" + header});
    expect("from,A,B,default,^x\nA,0.9,0.09,0.01\n", {"the column 'x'" + header});
    expect("^From,A,B,default\nA,0.9,0.09,0.01\n", {"the column 'From'" + header});
    expect("from,A,B,default\nA,0.9,0.09,0.01\n^A,0.9,0.09,0.01\nB,0.1,0.8,0.1\n",
           {"the row 'A' stands twice, first in line 2, expected each row once"});
    expect("from,A,B,default\nA,0.9,0.09,0.01\n", {"no row 'B', expected a row for each of A,B"});
    expect("from,A,B,default\nA,0.9,0.09,0.01\nB,0.1,0.8,0.1\n^C,0,0,1\n",
           {"the row 'C', expected one of A,B"});
    expect("from,A,B,default\nB,0.1,0.8,0.1\n^A,0.9,0.09,0.01\n",
           {"the row 'A' is out of order, expected the order A,B"});
    expect("from,A,B,default\n^A,0.9,0.1\n^B,0.1,0.8,0.1,\n",
           {"3 cells in the row 'A', expected 4", "5 cells in the row 'B', expected 4"});
    expect("from,A,B,default\nA,0.9,0.09,0.01\n^\nB,0.1,0.8,0.1\n",
           {"an empty line, expected none"});
}

TEST(Transition, IsHeldToProbabilitiesThatSumToOne) {
    std::string const probability = ", expected a probability from 0 to 1";
    auto const expect = [](std::string_view text, std::vector<std::string> const& what) {
        expect_faults("transition.csv", text, what);
    };
    expect("from,A,B,default\nA,^1.01,^-0.02,0.01\nB,^ 0.1,^0.8%,^\n",
           {"'1.01' is out of range" + probability, "'-0.02' is out of range" + probability,
            "' 0.1' is no plain number" + probability, "'0.8%' is no plain number" + probability,
            "'' is no plain number" + probability});
    expect("from,A,B,default\n^A,0.9,0.0903,0.01\nB,0.1,0.8,0.1\n",
           {"the row sums to 1.0003, expected 1, within 0.0002"});
    expect("from,A,B,default\nA,0.9,0.0902,0.01\nB,0.1,0.7998,0.1\n", {});
    expect("from,A,B,default\r\n\"A\",0.9,\"0.09\",0.01\r\nB,1e-1,0.8,0.1", {});
}

TEST(Indices, AreHeldToNamesOfTheirForm) {
    std::string const form =
        ", expected sector:CODE, country:CODE, sector:others, country:others or all";
    auto const expect = [](std::string_view text, std::vector<std::string> const& what) {
        expect_faults("indices.csv", text, what);
    };
    expect("index,^sector:,^region:X,^sector:by\n",
           {"the index 'sector:'" + form, "the index 'region:X'" + form,
            "the index 'sector:by'" + form});
    expect("index,sector:others,country:others,^sector:others\n",
           {"the index 'sector:others' stands twice, expected each once"});
    expect("index,sector:others,country:others,^all\n",
           {"the index 'all' beside others, expected it alone"});
    expect("^index\n", {"no index, expected index,<names>"});
    expect("^x,sector:others,country:others\n",
           {"the column 'x', expected the header index,sector:others,country:others"});
    expect("index,sector:others,country:others\nsector:others,1,0.5\n",
           {"no row 'country:others', expected a row for each of sector:others,country:others"});
}

TEST(Indices, AreHeldToACorrelationMatrix) {
    auto const expect = [](std::string_view text, std::vector<std::string> const& what) {
        expect_faults("indices.csv", text, what);
    };
    expect("index,sector:others,country:others\nsector:others,^0.9,^1.5\ncountry:others,0.5,1\n",
           {"0.9 of 'sector:others' with itself, expected 1",
            "'1.5' is out of range, expected a correlation from -1 to 1"});
    expect("index,sector:others,country:others\nsector:others,1,0.5\ncountry:others,^0.6,1\n",
           {"0.6 here, but 0.5 for the same pair at 2:17, expected the same correlation both "
            "ways"});
    // Eigenvalues of a 3 x 3 matrix with -r off the diagonal: 1 - 2r, and 1 + r twice.
    expect(
        "index,sector:others,country:others,country:X\n"
        "sector:others,1,-0.9,-0.9\ncountry:others,-0.9,1,-0.9\ncountry:X,-0.9,-0.9,1\n",
        {"the matrix is not positive semi-definite, its smallest eigenvalue is -0.8, expected "
         "correlations that can hold together, none of its eigenvalues below 0"});
    expect("index,sector:others,country:others\nsector:others,1,1\ncountry:others,1,1\n", {});
}

TEST(Indices, FitTheWeights) {
    std::string const others = " in indices.csv, expected one for all that has no index of its own";
    expect_model_faults("index_weights", "index_weights: ^{all: 1.0}\n",
                        {"no index 'all'" + others});
    expect_model_faults("index_weights", "index_weights: {country: 1.0}\n", {});
    expect_model_faults("index_weights", "index_weights: ^^{all: 1.0, sector: 0.5}\n",
                        {"'all' beside other kinds, expected {all: 1.0}, or weights of sector, "
                         "country or both",
                         "no index 'all'" + others});
    expect_model_faults("index_weights", "index_weights: ^{}\n",
                        {"no weights, expected {all: 1.0}, or weights of sector, country or both"});
    expect_model_faults("index_weights", "index_weights: {sector: ^0, ^region: 1}\n",
                        {"'0' is out of range, expected a number above 0, at most 1000",
                         "unknown key 'region', expected one of all, sector or country"});
    auto files = good;
    files["indices.csv"] = "index,sector:X\nsector:X,1\n";
    EXPECT_THAT(faults(files), ElementsAre("model.yaml:10:16: no index 'sector:others'" + others,
                                           "model.yaml:10:16: no index 'country:others'" + others));
    files["indices.csv"] = "index,all\nall,1\n";
    files["model.yaml"].replace(files["model.yaml"].find("{sector: 0.8, country: 0.2}"), 27,
                                "{all: 1}");
    EXPECT_THAT(faults(files), IsEmpty());
}

// 0.5 and 0.5 of two indices with correlation -1 leave nothing to rescale.
TEST(Indices, DoNotCancelOut) {
    auto files = good;
    files["model.yaml"].replace(files["model.yaml"].find("{sector: 0.8, country: 0.2}"), 27,
                                "{sector: 0.5, country: 0.5}");
    files["indices.csv"] =
        "index,sector:others,country:others\nsector:others,1,-1\ncountry:others,-1,1\n";
    EXPECT_THAT(faults(files),
                ElementsAre("indices.csv:2:17: 'sector:others' and 'country:others' cancel out "
                            "under these index_weights, expected a correlation further from -1"));
    files["model.yaml"] = good.at("model.yaml");
    EXPECT_THAT(faults(files), IsEmpty());
}

TEST(Limits, AreReadWhole) {
    auto const limits = rules(with("limits.yaml", R"(
defaults: {warning_at: 85% of breach, cure_margin: 2.5%, owner: desk, acknowledge_for: 1 day}
limits:
- id: one
  per: group_or_name
  measure: exposure
  breach_at: 25% of tier1
- id: two
  per: name
  where: {segment: [corporate, fund], grade: B or worse, country: unknown, sector: X,
          name: [N1], connected_group: C1}
  measure: commitment
  breach_at: {by: grade, A: EUR 1.5 bn, B: EUR 30 k, others: EUR 0}
  warning_at: {by: grade, A: EUR 1 m, B: EUR 30, default: EUR 0}
  cure_margin: 0%
  owner: other
  acknowledge_for: 20 days
  act: >
    Tell
    someone.
- {id: three, per: portfolio, measure: concentration_index, across: sector, breach_at: 0.25, warning_at: none}
- {id: four, per: sector, measure: default_probability, breach_at: {by: sector, X: 0.35%, others: 100%}, warning_at: 0.2%}
)"))
                            .limits;
    ASSERT_TRUE(limits);
    ASSERT_EQ(limits->size(), 4U);
    EXPECT_EQ((*limits)[0], (Limit{.limit_id = "one",
                                   .per = SubjectKind::group_or_name,
                                   .measure = Measure::exposure,
                                   .where = {},
                                   .breach_at = flat(ShareOf{0.25, Total::tier1}),
                                   .warning_at = alerts::ShareOfBreach{0.85},
                                   .cure_margin = 0.025,
                                   .owner = "desk",
                                   .acknowledge_for_days = 1,
                                   .act = ""}));
    Limit two;
    two.limit_id = "two";
    two.per = SubjectKind::name;
    two.measure = Measure::commitment;
    two.where = {{SubjectKind::segment, {"corporate", "fund"}},
                 {SubjectKind::grade, {"B", "default"}},
                 {SubjectKind::country, {"unknown"}},
                 {SubjectKind::sector, {"X"}},
                 {SubjectKind::name, {"N1"}},
                 {SubjectKind::connected_group, {"C1"}}};
    two.breach_at = {SubjectKind::grade, {{"A", money(1.5e9)}, {"B", money(30e3)}}, money(0)};
    two.warning_at = alerts::LevelRule{
        SubjectKind::grade, {{"A", money(1e6)}, {"B", money(30)}, {"default", money(0)}}, {}};
    two.cure_margin = 0.0;
    two.owner = "other";
    two.acknowledge_for_days = 20;
    two.act = "Tell someone.";
    EXPECT_EQ((*limits)[1], two);
    EXPECT_EQ((*limits)[2].across, SubjectKind::sector);
    EXPECT_EQ((*limits)[2].breach_at, flat(0.25));
    EXPECT_EQ((*limits)[2].warning_at, alerts::WarningRule{std::monostate{}});
    EXPECT_EQ((*limits)[3].breach_at,
              (alerts::LevelRule{SubjectKind::sector, {{"X", 0.0035}}, 1.0}));
    EXPECT_EQ((*limits)[3].warning_at, alerts::WarningRule{flat(0.002)});
}

TEST(Limits, TakeGradeRangesWithDefaultAsTheWorst) {
    auto const codes = [](std::string const& grade) {
        auto const read = limit(
            "{id: a, per: name, measure: exposure, breach_at: EUR 1, where: "
            "{grade: " +
            grade + "}}");
        return read.where.empty() ? std::vector<std::string>{} : read.where.front().codes;
    };
    EXPECT_THAT(codes("A or worse"), ElementsAre("A", "B", "default"));
    EXPECT_THAT(codes("B or better"), ElementsAre("A", "B"));
    EXPECT_THAT(codes("[A or better, default]"), ElementsAre("A", "default"));
    EXPECT_THAT(codes("default"), ElementsAre("default"));
}

TEST(Limits, NeedTheirKeysOnce) {
    expect_limit_faults(
        "^^^^{}",
        {"a key is missing, expected 'id'", "a key is missing, expected 'per'",
         "a key is missing, expected 'measure'", "a key is missing, expected 'breach_at'"});
}

TEST(Limits, HaveIdsOfTheirOwn) {
    expect_faults("limits.yaml",
                  "limits:\n"
                  "- {id: a, per: name, measure: exposure, breach_at: EUR 1}\n"
                  "- {id: ^a, per: name, measure: exposure, breach_at: EUR 1}\n",
                  {"the id 'a' stands twice, first at 2:8, expected an id of its own for each "
                   "limit"});
    expect_limit_faults("{id: ^'a,b', per: name, measure: exposure, breach_at: EUR 1}",
                        {"'a,b', expected an id without a comma, a line break or a blank at its "
                         "ends"});
    expect_limit_faults("{id: ^others, per: name, measure: exposure, breach_at: EUR 1}",
                        {"the reserved word 'others', expected another id"});
    expect_faults("limits.yaml", "limits: ^[]\n", {"no limit, expected at least one"});
    expect_faults("limits.yaml", "limits: ^all\n", {"'all', expected a list of limits"});
    expect_faults("limits.yaml", "limits:\n- ^one\n", {"'one', expected keys and values"});
}

TEST(Limits, ListTheWordsTheyKnow) {
    std::string const kinds =
        "one of name, connected_group, group_or_name, sector, country, grade, segment or portfolio";
    expect_limit_faults("{id: a, per: ^nane, measure: exposure, breach_at: EUR 1}",
                        {"unknown word 'nane', expected " + kinds + " (did you mean 'name'?)"});
    expect_limit_faults("{id: a, per: name, measure: ^exposures, breach_at: EUR 1}",
                        {"unknown word 'exposures', expected one of exposure, commitment, "
                         "expected_loss, var_contribution, es_contribution, default_probability, "
                         "downgrade_probability or concentration_index (did you mean "
                         "'exposure'?)"});
    expect_limit_faults(
        "{id: a, per: portfolio, measure: concentration_index, across: ^grade, "
        "breach_at: 0.1}",
        {"unknown word 'grade', expected one of name, group_or_name, sector or "
         "country"});
}

TEST(Limits, SayOfLaterWordsThatTheyAreNotYetAvailable) {
    for (std::string const key :
         {"granted", "greater_of", "lesser_of", "except", "part_of", "list_at", "if_not_granted",
          "effective_from", "effective_until", "breach_probability_warning"})
        expect_limit_faults(
            "{id: a, per: name, measure: exposure, breach_at: EUR 1, ^" + key + ": 1}",
            {"'" + key + "' is not yet available"});
    expect_faults("limits.yaml", "^retired: [b]\n" + good.at("limits.yaml"),
                  {"'retired' is not yet available"});
    for (std::string const key : {"watch", "product", "remaining_years"})
        expect_limit_faults(
            "{id: a, per: name, measure: exposure, breach_at: EUR 1, where: {^" + key + ": x}}",
            {"'" + key +
             "' is not yet available, expected one of segment, sector, country, "
             "grade, name or connected_group"});
    for (std::string const measure : {"gross_exposure", "potential_exposure", "large_exposure"})
        expect_limit_faults(
            "{id: a, per: name, measure: ^" + measure + ", breach_at: EUR 1}",
            {"'" + measure +
             "' is not yet available, expected one of exposure, commitment, "
             "expected_loss, var_contribution, es_contribution, default_probability, "
             "downgrade_probability or concentration_index"});
    expect_limit_faults("{id: a, per: ^[sector, grade], measure: exposure, breach_at: EUR 1}",
                        {"a limit on a cross of subjects is not yet available, expected one of "
                         "name, connected_group, group_or_name, sector, country, grade, segment "
                         "or portfolio"});
    std::string const level =
        ", expected an amount such as EUR 60 m (k, m, bn or none), or a share such as 25% of "
        "tier1, own_funds or portfolio (at most 100% of the portfolio)";
    expect_limit_faults("{id: a, per: name, measure: exposure, breach_at: ^80% of limit b}",
                        {"'80% of limit b' is not yet available" + level});
    expect_limit_faults("{id: a, per: name, measure: exposure, breach_at: ^granted}",
                        {"'granted' is not yet available" + level});
    expect_limit_faults(
        "{id: a, per: name, measure: exposure, breach_at: {^greater_of: [EUR 1, EUR 2]}}",
        {"'greater_of' is not yet available, expected a level, or levels {by: …}"});
}

TEST(Levels, FitTheirMeasure) {
    std::string const money =
        ", expected an amount such as EUR 60 m (k, m, bn or none), or a share such as 25% of "
        "tier1, own_funds or portfolio (at most 100% of the portfolio)";
    auto const no_level = [&](std::string const& text) {
        return "'" + text + "' is no level of exposure" + money;
    };
    for (std::string const text : {"60",
                                   "2.5%",
                                   "EUR",
                                   "EUR 60 mn",
                                   "EUR 60m",
                                   "EUR -1",
                                   "EUR 010",
                                   "EUR .5",
                                   "EUR 1e6",
                                   "EUR +1",
                                   "EUR 99999999999 bn",
                                   "60 m",
                                   "-5% of tier1",
                                   "25% of tier2",
                                   "25% tier1",
                                   "101% of portfolio",
                                   "none",
                                   "85% of breach",
                                   "EUR nan",
                                   "EUR 1 m m",
                                   "25%of tier1"})
        expect_limit_faults("{id: a, per: name, measure: exposure, breach_at: ^" + text + "}",
                            {no_level(text)});
    expect_limit_faults("{id: a, per: name, measure: exposure, breach_at: ^'EUR 1,000'}",
                        {no_level("EUR 1,000")});
    expect_limit_faults("{id: a, per: name, measure: exposure, breach_at: ^CHF 1 m}",
                        {"'CHF 1 m' is not in the base currency, expected an amount in EUR"});
    for (std::string const text :
         {"0.025", "2.5", "EUR 1", "25% of tier1", "2% of portfolio", "101%", "-1%", "010%"})
        expect_limit_faults(
            "{id: a, per: name, measure: default_probability, breach_at: ^" + text + "}",
            {"'" + text +
             "' is no level of default_probability, expected a probability from 0% "
             "to 100% such as 2.5%"});
    for (std::string const text : {"2%", "EUR 1", "2% of portfolio", "0x1"})
        expect_limit_faults(
            "{id: a, per: portfolio, measure: concentration_index, breach_at: ^" + text + "}",
            {"'" + text + "' is no plain number, expected a number from 0 to 1 such as 0.02"});
    expect_limit_faults("{id: a, per: portfolio, measure: concentration_index, breach_at: ^1.1}",
                        {"'1.1' is out of range, expected a number from 0 to 1 such as 0.02"});
    expect_limit_faults("{id: a, per: name, measure: exposure, ^breach_at: }",
                        {"no value" + money});
    expect_limit_faults("{id: a, per: name, measure: exposure, breach_at: ^[EUR 1]}",
                        {"a list" + money});
}

TEST(Levels, AreExactAmounts) {
    auto const level = [](std::string const& text) {
        return limit("{id: a, per: name, measure: exposure, breach_at: " + text + "}").breach_at;
    };
    EXPECT_EQ(level("EUR 60 m"), flat(money(60e6)));
    EXPECT_EQ(level("EUR 0.001"), flat(model::Money::from_thousandths(1)));
    EXPECT_EQ(level("EUR 1.1 bn"), flat(model::Money::from_thousandths(1'100'000'000'000)));
    EXPECT_EQ(level("\"EUR 2 k\""), flat(money(2000)));
    EXPECT_EQ(level("150% of own_funds"), flat(ShareOf{1.5, Total::own_funds}));
    EXPECT_EQ(level("12.5% of portfolio"), flat(ShareOf{0.125, Total::portfolio}));
}

TEST(Levels, ByAFactAreCompleteOrHaveOthers) {
    auto const with_levels = [](std::string const& per, std::string const& levels) {
        return "{id: a, per: " + per + ", measure: exposure, breach_at: " + levels + "}";
    };
    expect_limit_faults(with_levels("name", "^{by: grade, A: EUR 1}"),
                        {"no level for B, default, expected a level for every grade and default, "
                         "or 'others'"});
    expect_limit_faults(with_levels("name", "{by: grade, A: EUR 1, others: EUR 2}"), {});
    expect_limit_faults(with_levels("name", "^{by: segment, corporate: EUR 1, bank: EUR 1}"),
                        {"no level for sovereign, fund, ccp, other, expected a level for every "
                         "segment, or 'others'"});
    expect_limit_faults(with_levels("segment",
                                    "{by: segment, corporate: EUR 1, bank: EUR 1, sovereign: EUR "
                                    "1, fund: EUR 1, ccp: EUR 1, other: EUR 1}"),
                        {});
    for (std::string const fact : {"sector", "country"})
        expect_limit_faults(with_levels(fact, "^{by: " + fact + ", X: EUR 1}"),
                            {"no level for codes that are not listed, expected 'others'"});
    expect_limit_faults(with_levels("sector", "{by: sector, unknown: EUR 1, others: EUR 1}"), {});
    expect_limit_faults(with_levels("sector", "{by: sector, ^default: EUR 1, others: EUR 1}"),
                        {"the reserved word 'default', expected the code of a sector"});
    expect_limit_faults(with_levels("name", "{by: grade, ^C: EUR 1, others: EUR 1}"),
                        {"unknown word 'C', expected one of A, B or default (did you mean 'A'?)"});
    expect_limit_faults(with_levels("name", "^{A: EUR 1}"),
                        {"levels without what chooses among them, expected 'by'"});
    expect_limit_faults(with_levels("name", "{by: ^name, others: EUR 1}"),
                        {"unknown word 'name', expected one of grade, sector, country or segment"});
    expect_limit_faults(with_levels("name", "{by: grade, A: ^1, ^B:, others: ^{by: grade}}"),
                        {"'1' is no level of exposure, expected an amount such as EUR 60 m (k, m, "
                         "bn or none), or a share such as 25% of tier1, own_funds or portfolio "
                         "(at most 100% of the portfolio)",
                         "no value, expected an amount such as EUR 60 m (k, m, bn or none), or a "
                         "share such as 25% of tier1, own_funds or portfolio (at most 100% of the "
                         "portfolio)",
                         "a map of keys and values, expected an amount such as EUR 60 m (k, m, bn "
                         "or none), or a share such as 25% of tier1, own_funds or portfolio (at "
                         "most 100% of the portfolio)"});
}

TEST(Levels, AreChosenOnlyByAFactTheSubjectHasOnce) {
    auto const expect = [](std::string const& per, std::string const& fact, bool fits) {
        auto const limit = "{id: a, per: " + per +
                           ", measure: exposure, breach_at: {by: " + (fits ? "" : "^") + fact +
                           ", others: EUR 1}}";
        auto const fault = "a " + per + " has no one " + fact +
                           ", expected a fact that each subject of the limit has once";
        expect_limit_faults(limit, std::vector<std::string>(fits ? 0 : 1, fault));
    };
    for (std::string const fact : {"grade", "sector", "country", "segment"}) {
        for (std::string const per : {"name", "connected_group", "group_or_name", "sector",
                                      "country", "grade", "segment", "portfolio"}) {
            bool const group = per == "connected_group" || per == "group_or_name";
            expect(per, fact, per == "name" || per == fact || (group && fact == "grade"));
        }
    }
}

TEST(Where, SelectsByCodesThatCanBe) {
    auto const with_where = [](std::string const& where) {
        return "{id: a, per: name, measure: exposure, breach_at: EUR 1, where: " + where + "}";
    };
    expect_limit_faults(with_where("{^sectr: X}"),
                        {"unknown fact 'sectr', expected one of segment, sector, country, grade, "
                         "name or connected_group (did you mean 'sector'?)"});
    expect_limit_faults(with_where("{segment: ^banks}"),
                        {"unknown word 'banks', expected one of corporate, bank, sovereign, fund, "
                         "ccp or other (did you mean 'bank'?)"});
    expect_limit_faults(with_where("{grade: [^C, ^D or worse]}"),
                        {"unknown word 'C', expected one of A, B or default (did you mean 'A'?)",
                         "unknown word 'D', expected one of A, B or default (did you mean 'A'?)"});
    expect_limit_faults(with_where("{grade: [A or worse, ^B]}"),
                        {"'B' is chosen twice, expected each code once"});
    expect_limit_faults(with_where("{country: ^[]}"),
                        {"an empty list, expected at least one code"});
    expect_limit_faults(with_where("^{}"),
                        {"no condition, expected a fact and its codes, or no 'where'"});
    expect_limit_faults(with_where("^AT"), {"'AT', expected facts and their codes"});
    expect_limit_faults(with_where("{name: ^unknown, sector: ^by}"),
                        {"the reserved word 'unknown', expected the code of a name",
                         "the reserved word 'by', expected the code of a sector"});
    expect_limit_faults(with_where("{connected_group: ^'a,b'}"),
                        {"'a,b', expected the code of a connected_group without a comma, a line "
                         "break or a blank at its ends"});
}

TEST(Warnings, StandAtOrBelowTheBreachLevel) {
    auto const levels = [](std::string const& breach, std::string const& warning) {
        return "{id: a, per: name, measure: exposure, breach_at: " + breach +
               ", warning_at: " + warning + "}";
    };
    std::string const above = "a warning level above its breach level";
    std::string const expected = ", expected a level at or below it";
    expect_limit_faults(levels("EUR 1 m", "^EUR 1001 k"), {above + expected});
    expect_limit_faults(levels("EUR 1 m", "EUR 1000 k"), {});
    expect_limit_faults(levels("20% of tier1", "^21% of tier1"), {above + expected});
    expect_limit_faults(levels("20% of tier1", "21% of own_funds"), {});
    expect_limit_faults(levels("20% of tier1", "EUR 1 bn"), {});
    expect_limit_faults(levels("EUR 1", "^101% of breach"), {above + ", expected at most 100%"});
    expect_limit_faults(levels("{by: grade, A: EUR 9, B: EUR 5, default: EUR 1}",
                               "{by: grade, A: EUR 9, B: ^EUR 6, default: ^EUR 2}"),
                        {above + " for 'B'" + expected, above + " for 'default'" + expected});
    expect_limit_faults(levels("{by: grade, A: EUR 9, others: EUR 5}", "^EUR 6"),
                        {above + " for 'others'" + expected});
    expect_limit_faults(levels("EUR 5", "{by: grade, A: EUR 5, others: ^EUR 6}"),
                        {above + " for 'others'" + expected});
    expect_limit_faults(
        levels("{by: sector, X: EUR 1, others: EUR 5}", "{by: sector, others: ^EUR 5}"),
        {above + " for 'X'" + expected});
    expect_limit_faults(
        levels("{by: sector, X: EUR 1, others: EUR 5}", "{by: grade, others: EUR 5}"), {});
    expect_limit_faults(
        "{id: a, per: name, measure: default_probability, breach_at: 2%, warning_at: ^2.1%}",
        {above + expected});
}

TEST(Handling, HasItsForms) {
    auto const with_key = [](std::string const& key) {
        return "{id: a, per: name, measure: exposure, breach_at: EUR 1, " + key + "}";
    };
    for (std::string const text : {"0.05", "100%", "-1%", "5% of breach", "5"})
        expect_limit_faults(with_key("cure_margin: ^" + text),
                            {"'" + text +
                             "', expected a percentage from 0% to below 100% such as "
                             "5%"});
    for (std::string const text : {"5", "0 days", "1.5 days", "5 weeks", "36501 days", "05 days"})
        expect_limit_faults(with_key("acknowledge_for: ^" + text),
                            {"'" + text +
                             "', expected whole days, from 1 to 36500, such as 5 "
                             "days"});
    expect_limit_faults(with_key(R"(act: ^"two\nlines")"),
                        {"more than one line, expected what to do, in one paragraph"});
    expect_limit_faults(with_key("owner: ^[a]"), {"a list, expected who looks after the limit"});
    expect_faults("limits.yaml",
                  "defaults: {warning_at: ^EUR 1, ^per: name}\n" + good.at("limits.yaml"),
                  {"'EUR 1', expected a share such as 85% of breach, or none",
                   "unknown key 'per', expected one of warning_at, cure_margin, owner or "
                   "acknowledge_for"});
}

TEST(Concentration, IsOfManyPartsAndAlone) {
    auto const index = [](std::string const& per, std::string const& across) {
        return "{id: a, per: " + per +
               ", measure: concentration_index, breach_at: 0.1, across: " + across + "}";
    };
    expect_limit_faults(index("^name", "name"),
                        {"the concentration of a name across name is always 1, expected a subject "
                         "of many parts"});
    expect_limit_faults(index("^sector", "sector"),
                        {"the concentration of a sector across sector is always 1, expected a "
                         "subject of many parts"});
    expect_limit_faults(index("sector", "group_or_name"), {});
    expect_limit_faults("{id: a, per: sector, measure: exposure, breach_at: EUR 1, ^across: name}",
                        {"'across' has no effect on this measure, expected it with "
                         "concentration_index only"});
}

}  // namespace
