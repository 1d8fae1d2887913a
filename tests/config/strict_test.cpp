#include "config/strict.hpp"

#include "tests/config/marked.hpp"

#include <fmt/format.h>
#include <gmock/gmock.h>
#include <gtest/gtest.h>
#include <sys/stat.h>

#include <chrono>
#include <filesystem>
#include <fstream>
#include <optional>
#include <string>
#include <vector>

namespace {

using config::File;
using config::YamlNode;
using testing::ElementsAre;
using testing::IsEmpty;

std::vector<std::string> texts(File const& file) {
    std::vector<std::string> texts;
    for (auto const& fault : file.faults()) texts.push_back(fault.text());
    return texts;
}

// Holds a YAML file to the faults at its marks.
void expect_yaml_faults(std::string_view with_marks, std::vector<std::string> const& what) {
    auto const marked = tests::marked(with_marks);
    auto file = File::from_text("x.yaml", marked.text);
    config::read_yaml(file);
    EXPECT_EQ(texts(file), tests::at_marks("x.yaml", marked, what)) << marked.text;
}

void expect_csv_faults(std::string_view with_marks, std::vector<std::string> const& what) {
    auto const marked = tests::marked(with_marks);
    auto file = File::from_text("x.csv", marked.text);
    EXPECT_THAT(config::read_csv(file), IsEmpty()) << marked.text;
    EXPECT_EQ(texts(file), tests::at_marks("x.csv", marked, what)) << marked.text;
}

std::vector<std::vector<std::string>> cells(std::string const& text) {
    auto file = File::from_text("x.csv", text);
    std::vector<std::vector<std::string>> rows;
    for (auto const& row : config::read_csv(file)) {
        rows.emplace_back();
        for (auto const& cell : row) rows.back().push_back(cell.text);
    }
    EXPECT_THAT(texts(file), IsEmpty());
    return rows;
}

// A folder that is gone with the test.
class TemporaryFolder : public testing::Test {
protected:
    TemporaryFolder() {
        std::string name = "/tmp/loadline-strict-XXXXXX";
        folder = mkdtemp(name.data());
    }
    ~TemporaryFolder() override { std::filesystem::remove_all(folder); }

    std::filesystem::path folder;
};

using Files = TemporaryFolder;

TEST(Numbers, FollowOnePlainGrammar) {
    struct Case {
        std::string_view text;
        std::optional<double> value;
    };
    for (auto const& [text, value] : std::vector<Case>{
             {"0", 0.0},      {"1", 1.0},     {"0.999", 0.999}, {"1e-3", 1e-3}, {"-2.5", -2.5},
             {"1E+2", 100.0}, {"10", 10.0},   {"1e308", 1e308}, {"010", {}},    {"0x10", {}},
             {"1_000", {}},   {".5", {}},     {"5.", {}},       {".nan", {}},   {".inf", {}},
             {"1e999", {}},   {"1,5", {}},    {"+5", {}},       {"", {}},       {"-", {}},
             {"nan", {}},     {"inf", {}},    {"-inf", {}},     {"1e", {}},     {"1e+", {}},
             {" 1", {}},      {"1 ", {}},     {"1.5abc", {}},   {"--1", {}},    {"00", {}},
             {"-01", {}},     {"1e-999", {}}, {"true", {}},     {"1.2.3", {}},  {"\xD9\xA1", {}},
             {"0o17", {}},
         }) {
        EXPECT_EQ(config::number(text), value) << text;
    }
    EXPECT_FALSE(std::signbit(*config::number("-0")));
}

TEST(Numbers, AreWholeOnlyWhenWrittenSo) {
    EXPECT_EQ(config::whole_number("0"), 0);
    EXPECT_EQ(config::whole_number("9223372036854775807"), 9223372036854775807);
    for (auto const* const text : {"9223372036854775808", "-1", "1.0", "1e3", "007", "", "1 000"})
        EXPECT_EQ(config::whole_number(text), std::nullopt) << text;
}

// A level of 0.35% must be the same double as a probability of 0.0035: equal is inside.
TEST(Numbers, ArePercentagesWithoutASecondRounding) {
    for (int i = 1; i < 10'000; ++i) {
        auto const whole = std::to_string(i / 100);
        auto const part = std::to_string(100 + i % 100).substr(1);
        auto const four = std::to_string(10'000 + i).substr(1);
        EXPECT_EQ(config::decimal(fmt::format("{}.{}", whole, part), -2),
                  std::stod(fmt::format("0.{}", four)));
    }
    EXPECT_EQ(config::decimal("60", 6), 60e6);
    for (auto const* const text : {"", "-1", "1e3", "+1", ".5", "1.", "1,000", "01"})
        EXPECT_EQ(config::decimal(text, 0), std::nullopt) << text;
}

TEST(Yaml, KnowsThePlaceOfEveryValue) {
    auto file = File::from_text("x.yaml",
                                "# ü\n"
                                "\"ä\": [1,  'two']\r\n"
                                "map:\n"
                                "  key: {inner: more words}\n"
                                "text: >-\n"
                                "  folded\n"
                                "  text\n");
    YamlNode const root = config::read_yaml(file);
    EXPECT_THAT(texts(file), IsEmpty());
    ASSERT_EQ(root.items.size(), 3U);
    auto const& list = root.items[0];
    EXPECT_EQ(list.key, "ä");
    EXPECT_EQ(list.key_place, (config::Place{2, 1}));
    EXPECT_EQ(list.place, (config::Place{2, 7}));  // in bytes: ä has two
    EXPECT_EQ(list.items[0].text, "1");
    EXPECT_FALSE(list.items[0].quoted);
    EXPECT_EQ(list.items[1].place, (config::Place{2, 12}));
    EXPECT_TRUE(list.items[1].quoted);
    auto const& inner = root.items[1].items[0].items[0];
    EXPECT_EQ(inner.text, "more words");
    EXPECT_EQ(inner.place, (config::Place{4, 16}));
    EXPECT_EQ(root.items[2].text, "folded text");
    EXPECT_EQ(root.items[2].place, (config::Place{5, 7}));
}

TEST(Yaml, TakesWordsThatOthersReadAsTruthOrNumberAsText) {
    auto file = File::from_text("x.yaml", "[NO, yes, on, true, 010, 1e3, 2026-01-01, 12:30]");
    YamlNode const root = config::read_yaml(file);
    std::vector<std::string> items;
    for (auto const& item : root.items) items.push_back(item.text);
    EXPECT_THAT(items, ElementsAre("NO", "yes", "on", "true", "010", "1e3", "2026-01-01", "12:30"));
}

TEST(Yaml, HasNoValueWhereNothingNullOrATildeStands) {
    auto const marked = tests::marked("^a:\nname: ^~\nc: ^null\nd: {e: 1, ^f: }\ng: [^null]\n");
    auto file = File::from_text("x.yaml", marked.text);
    YamlNode const root = config::read_yaml(file);
    std::vector<config::Place> places;
    for (auto const* node : {&root.items[0], &root.items[1], &root.items[2],
                             &root.items[3].items[1], &root.items[4].items[0]}) {
        EXPECT_EQ(node->kind, YamlNode::Kind::nothing);
        places.push_back(node->place);
    }
    EXPECT_EQ(places, marked.places);
}

TEST(Yaml, OfCommentsAloneIsAnEmptyMap) {
    auto file = File::from_text("x.yaml", "# nothing set\n");
    EXPECT_EQ(config::read_yaml(file).kind, YamlNode::Kind::map);
    EXPECT_THAT(texts(file), IsEmpty());
}

TEST(Yaml, RefusesWhatHidesAValue) {
    auto const anchor = [](std::string const& name) {
        return "the anchor '&" + name + "', expected every value written out where it is used";
    };
    std::string const alias = "an alias, expected the value written out";
    std::string const untagged = ", expected the value without a tag";
    expect_yaml_faults("a: ^&x 5\nb: ^*x\n", {anchor("x"), alias});
    expect_yaml_faults("a: ^&x\n  b: 1\n", {anchor("x")});
    expect_yaml_faults("^&x [^*x]\n", {anchor("x"), alias});
    expect_yaml_faults("a: ^!!str 010\n", {"the tag 'tag:yaml.org,2002:str'" + untagged});
    expect_yaml_faults("a: ^! 12\n", {"the tag '!'" + untagged});
    expect_yaml_faults("a: ^!mine {b: 1}\n", {"the tag '!mine'" + untagged});
    expect_yaml_faults("a: 1\n^<<: {b: 2}\n",
                       {"the merge key '<<', expected the keys written out"});
    expect_yaml_faults("? ^[a, b]\n: c\n",
                       {"a key that is no word, expected a word before the colon"});
    expect_yaml_faults("^~: c\n", {"a key that is no word, expected a word before the colon"});
}

TEST(Yaml, RefusesARepeatedKeyAndNamesBothPlaces) {
    expect_yaml_faults("a: 1\nb: 2\n^a: 3\nc: {d: 1, ^d: 1}\ne: {a: 1}\n",
                       {"the key 'a' stands twice, first at 1:1, expected each key once",
                        "the key 'd' stands twice, first at 4:5, expected each key once"});
    expect_yaml_faults("a: 1\n^\"a\": 3\n",
                       {"the key 'a' stands twice, first at 1:1, expected each key once"});
}

TEST(Yaml, RefusesASecondDocument) {
    std::string const what =
        "a second document begins, expected one document a file, its keys all at the same "
        "indentation";
    expect_yaml_faults("a: 1\n^---\nb: 2\n", {what});
    expect_yaml_faults("- a\n^b: c\n", {what});
    expect_yaml_faults("---\na: 1\n...\n", {});
}

TEST(Yaml, GoesOnAfterWhatItRefuses) {
    auto file = File::from_text("x.yaml", "a: &x 5\nb: *x\na: 6\nc: !t 7\nd: 8\n---\ne: 9\n");
    YamlNode const root = config::read_yaml(file);
    EXPECT_EQ(file.faults().size(), 5U);
    ASSERT_EQ(root.items.size(), 4U);
    EXPECT_EQ(root.items[0].text, "5");
    EXPECT_EQ(root.items[1].kind, YamlNode::Kind::unusable);
    EXPECT_EQ(root.items[2].kind, YamlNode::Kind::unusable);
    EXPECT_EQ(root.items[3].text, "8");
}

TEST(Yaml, NamesThePlaceOfBrokenSyntax) {
    auto const broken = [](std::string const& what) {
        return "not readable as YAML, " + what +
               ", expected closed brackets, even indentation, and quotes around text that holds "
               "': '";
    };
    expect_yaml_faults("a: [1, 2\n^", {broken("end of sequence flow not found")});
    expect_yaml_faults("act: Tell X^: now\n", {broken("illegal map value")});
    expect_yaml_faults("a: ^*x\n", {broken("the referenced anchor is not defined")});
    expect_yaml_faults("a: 1\n^\tb: 2\n", {broken("illegal tab when looking for indentation")});
    expect_yaml_faults("a: ^@x\n", {broken("unknown token")});
}

TEST(Yaml, RefusesTextThatIsNotPlain) {
    std::string const plain = ", expected plain text in UTF-8";
    expect_yaml_faults(
        "^\xEF\xBB\xBF"
        "a: 1\n",
        {"a byte order mark" + plain});
    expect_yaml_faults("a: ^\xC3(\n", {"a byte that is not UTF-8" + plain});
    expect_yaml_faults("a: 1\nb: x^\xC0\xAF\n", {"a byte that is not UTF-8" + plain});
    expect_yaml_faults(
        "^\xFF\xFE"
        "a",
        {"a byte that is not UTF-8" + plain});
    expect_yaml_faults("a: ^\xED\xA0\x80\n", {"a byte that is not UTF-8" + plain});
    expect_yaml_faults("a: ^\xF4\x90\x80\x80\n", {"a byte that is not UTF-8" + plain});
    expect_yaml_faults(std::string_view{"a: x^\0y\n", 8}, {"a hidden character (U+0000)" + plain});
    expect_yaml_faults("a: ^\x1B[2J\n", {"a hidden character (U+001B)" + plain});
    expect_yaml_faults("a: 1^\rb: 2\n", {"a hidden character (U+000D)" + plain});
    expect_yaml_faults("a: x^\xE2\x80\xAEy\n", {"a hidden character (U+202E)" + plain});
    expect_yaml_faults("a: ^\"x\\0y\"\n",
                       {"a hidden character (U+0000) in the value, expected plain text"});
}

TEST(Yaml, HasBounds) {
    auto const faults = [](std::string text) {
        auto file = File::from_text("x.yaml", std::move(text));
        config::read_yaml(file);
        return texts(file);
    };
    auto const repeated = [](std::string const& text, int times) {
        std::string all;
        for (int i = 0; i < times; ++i) all += text;
        return all;
    };
    EXPECT_THAT(faults(repeated("[", 16) + repeated("]", 16)), IsEmpty());
    EXPECT_THAT(faults(repeated("[", 17) + repeated("]", 17)),
                ElementsAre("x.yaml:1:17: more than 16 levels of nesting"));
    EXPECT_THAT(faults(repeated("- 1\n", 49'999)), IsEmpty());
    EXPECT_THAT(faults(repeated("- 1\n", 50'000)),
                ElementsAre("x.yaml:50000:3: more than 50000 values"));
    EXPECT_THAT(faults("a: " + std::string(4096, 'x')), IsEmpty());
    EXPECT_THAT(faults("a: " + std::string(4097, 'x')),
                ElementsAre("x.yaml:1:4: a value of 4097 bytes, expected at most 4096 bytes"));
    auto const a_mebibyte = "a: 1\n#" + std::string((1U << 20U) - 6U, 'x');
    EXPECT_THAT(faults(a_mebibyte), IsEmpty());
    EXPECT_THAT(faults(a_mebibyte + "x"),
                ElementsAre("x.yaml: the file is larger than 1 MiB, expected a smaller file"));
}

// Each of these keeps a lenient reader busy for ever, or ends it.
TEST(Yaml, IsNotHeldUpByHostileFiles) {
    std::string bomb = "a0: &a0 [x, x, x, x, x, x, x, x, x, x]\n";
    for (int i = 1; i < 10; ++i) {
        std::vector<std::string> const aliases(10, fmt::format("*a{}", i - 1));
        bomb += fmt::format("a{0}: &a{0} [{1}]\n", i, fmt::join(aliases, ", "));
    }
    auto const start = std::chrono::steady_clock::now();
    for (auto const& text :
         {bomb, std::string{"&a [*a, &b {c: *b}]\n"}, std::string(100'000, '['),
          std::string(100'000, '{'), std::string(100'000, '?'), std::string(1'000'000, '"')}) {
        auto file = File::from_text("x.yaml", text);
        config::read_yaml(file);
        EXPECT_FALSE(file.faults().empty()) << text.substr(0, 40);
    }
    EXPECT_LT(std::chrono::steady_clock::now() - start, std::chrono::seconds{5});
}

TEST(Csv, FollowsRfc4180) {
    using Rows = std::vector<std::vector<std::string>>;
    EXPECT_EQ(cells("a,b\n1,2\n"), (Rows{{"a", "b"}, {"1", "2"}}));
    EXPECT_EQ(cells("a,b\r\n1,2"), (Rows{{"a", "b"}, {"1", "2"}}));
    EXPECT_EQ(cells("\"a,\"\"b\"\"\",\"\",\n"), (Rows{{"a,\"b\"", "", ""}}));
    EXPECT_EQ(cells("\"two\nlines\",b\nc,"), (Rows{{"two\nlines", "b"}, {"c", ""}}));
    EXPECT_EQ(cells("a\n\nb\n"), (Rows{{"a"}, {""}, {"b"}}));
}

TEST(Csv, KnowsThePlaceOfEveryCell) {
    auto const marked = tests::marked("^ä,^\"x\ny\",^z\r\n^,^1\n");
    auto file = File::from_text("x.csv", marked.text);
    std::vector<config::Place> places;
    for (auto const& row : config::read_csv(file))
        for (auto const& cell : row) places.push_back(cell.place);
    EXPECT_EQ(places, marked.places);
}

TEST(Csv, RefusesWhatItCannotRead) {
    expect_csv_faults("a,^b\"c\n",
                      {"a quote inside the cell 'b\"c', expected the whole cell in quotes, with "
                       "each quote in it doubled"});
    expect_csv_faults("a\n1,^\"b\n", {"a quoted cell without its end, expected a closing quote"});
    expect_csv_faults("\"a\"^b,c\n",
                      {"text after the end of a quoted cell, expected a comma or a line end"});
    expect_csv_faults(std::string_view{"a,^\0\n", 5},
                      {"a hidden character (U+0000), expected plain text in UTF-8"});
    expect_csv_faults(
        "^\xEF\xBB\xBF"
        "a,b\n",
        {"a byte order mark, expected plain text in UTF-8"});
}

TEST_F(Files, AreReadByteForByte) {
    std::string const text = "a: 1\r\n# ü \t\n\n";
    std::ofstream{folder / "x.yaml", std::ios::binary} << text;
    EXPECT_EQ((File{folder, "x.yaml"}.text()), text);
}

TEST_F(Files, AreRefusedUnlessTheyAreFilesWithContent) {
    std::filesystem::create_directory(folder / "folder");
    ASSERT_EQ(mkfifo((folder / "pipe").c_str(), 0600), 0);
    std::ofstream{folder / "empty"} << "";
    std::ofstream{folder / "blank"} << " \n\n";
    EXPECT_THAT(texts(File{folder, "missing"}),
                ElementsAre("missing: the file is missing, expected it in " + folder.string() +
                            "; start from the example of that name"));
    EXPECT_THAT(texts(File{folder, "folder"}),
                ElementsAre("folder: is no regular file, expected a text file"));
    EXPECT_THAT(texts(File{folder, "pipe"}),
                ElementsAre("pipe: is no regular file, expected a text file"));
    for (std::string const name : {"empty", "blank"})
        EXPECT_THAT(texts(File{folder, name}),
                    ElementsAre(name + ": the file is empty, expected its content; start from the "
                                       "example of that name"));
}

TEST(Faults, SuggestTheWordThatIsNear) {
    std::vector<std::string_view> const words{"name", "grade", "measure"};
    EXPECT_EQ(config::one_of(words), "one of name, grade or measure");
    EXPECT_EQ(config::one_of(words, "mesure"),
              "one of name, grade or measure (did you mean 'measure'?)");
    EXPECT_EQ(config::one_of(words, "garde"),
              "one of name, grade or measure (did you mean 'grade'?)");
    EXPECT_EQ(config::one_of(words, "colour"), "one of name, grade or measure");
    EXPECT_EQ(config::one_of(std::vector<std::string_view>{"name"}), "name");
}

TEST(Faults, CutLongTextBetweenCharacters) {
    EXPECT_EQ(config::in_quotes(std::string(60, 'x')), "'" + std::string(60, 'x') + "'");
    EXPECT_EQ(config::in_quotes(std::string(59, 'x') + "üx"), "'" + std::string(59, 'x') + "…'");
}

}  // namespace
