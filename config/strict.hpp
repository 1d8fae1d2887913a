#pragma once

#include <compare>
#include <filesystem>
#include <initializer_list>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

// The desk's files, read strictly: text becomes values that know their place, and whatever a
// lenient reader would swallow is a fault. Faults are gathered, so that one reading shows them all.

namespace config {

// A place in a file; line 0 where the whole file is meant.
struct Place {
    int line = 0;    // from 1
    int column = 0;  // from 1, in bytes
    friend auto operator<=>(Place, Place) = default;
};

// One mistake in one file: where, what, and what was expected instead.
struct Fault {
    std::string file;  // its name inside the folder
    int line = 0;      // from 1; 0 where the whole file is meant
    int column = 0;    // from 1, in bytes
    std::string what;
    std::string expected;

    // file:line:column: what, expected …
    [[nodiscard]] std::string text() const;
    friend bool operator==(Fault const&, Fault const&) = default;
};

// One file of the folder: its exact bytes, and what is wrong with it.
class File {
public:
    // Reads the file once. What cannot be read, is no plain text, or is beyond 1 MiB has a fault
    // and no text.
    File(std::filesystem::path const& folder, std::string name);
    // Text that is already at hand, under the same rules.
    static File from_text(std::string name, std::string text);

    [[nodiscard]] std::string const& name() const { return name_; }
    [[nodiscard]] std::string const& text() const { return text_; }
    [[nodiscard]] std::vector<Fault> const& faults() const { return faults_; }

    void fault(Place place, std::string what, std::string expected = {});

private:
    explicit File(std::string name) : name_{std::move(name)} {}
    void accept(std::string text);

    std::string name_;
    std::string text_;
    std::vector<Fault> faults_;
};

// A value of a YAML file. One that is `unusable` has its fault already and raises no second one.
struct YamlNode {
    enum class Kind { unusable, nothing, scalar, list, map };

    Kind kind = Kind::unusable;
    Place place{};
    std::string text{};             // of a scalar
    bool quoted = false;            // a scalar in quotes or in block form: never a number
    std::vector<YamlNode> items{};  // of a list or, in the file's order, of a map
    std::string key{};              // of an item of a map; unique in it
    Place key_place{};
};

// The one document of a YAML file. Anchors, aliases, tags, merge keys, repeated keys and further
// documents are faults, and the rest is read on. A file of comments alone is a map without items;
// unusable where the file cannot be read to the end.
YamlNode read_yaml(File& file);

struct Cell {
    std::string text{};
    Place place{};
};

// The rows of a CSV file, each with at least one cell; none where it cannot be read to the end.
// Format: RFC 4180, UTF-8, lines end in LF or CR LF.
std::vector<std::vector<Cell>> read_csv(File& file);

// A number as RFC 8259 writes it, in a double's range; nothing for 010, 0x10, +5, .5, 5., 1,5,
// 1_000, .nan, .inf and 1e999.
std::optional<double> number(std::string_view text);
// Decimal digits alone, without leading zeros.
std::optional<long> whole_number(std::string_view text);
// A decimal number without sign or exponent, times ten to the power of `exponent`, rounded once:
// "0.35" and -2 give what 0.0035 gives.
std::optional<double> decimal(std::string_view text, int exponent);

// 'text', cut where it is long.
std::string in_quotes(std::string_view text);
// "one of a, b or c", with " (did you mean …?)" where one of the words is near what stands there.
std::string one_of(std::span<std::string_view const> words, std::string_view instead = {});

// An id or code: not empty, no comma, no control character, no blank at either end.
bool is_code(std::string_view text);

// Whether a list, map or scalar stands there; a fault if not.
bool is_kind(File& file, YamlNode const& node, YamlNode::Kind kind, std::string const& expected);

// Each reads a scalar of one kind. Nothing for no node; nothing, and a fault that says what was
// expected, for whatever else stands there. `in_domain` is the last test of a number.
std::optional<std::string> read_text(File& file, YamlNode const* node, std::string const& expected);
std::optional<std::string> read_code(File& file, YamlNode const* node, std::string const& expected);
std::optional<double> read_number(File& file, YamlNode const* node, std::string const& expected,
                                  bool (*in_domain)(double));
std::optional<long> read_whole(File& file, YamlNode const* node, long min, long max);
std::optional<std::string_view> read_word(File& file, YamlNode const* node,
                                          std::span<std::string_view const> words);

// The items of a map whose keys are known: every key must be asked for.
class Keys {
public:
    // Anything but a map is a fault, and has no keys.
    Keys(File& file, YamlNode const& map);

    // The value of a key; nothing where the key is absent.
    YamlNode const* find(std::string_view key);
    // The same, and absence is a fault.
    YamlNode const* require(std::string_view key);
    // Keys that a later version gives a meaning.
    void refuse_later(std::initializer_list<std::string_view> keys);
    // Whatever is left is unknown.
    void finish();

private:
    YamlNode const* take(std::string_view key);

    File& file_;
    Place place_;
    std::vector<YamlNode const*> left_;
    std::vector<std::string_view> known_;
    bool is_map_;
};

}  // namespace config
