#include "config/strict.hpp"

#include <fmt/format.h>
#include <yaml-cpp/eventhandler.h>
#include <yaml-cpp/exceptions.h>
#include <yaml-cpp/parser.h>

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <fstream>
#include <map>
#include <numeric>
#include <sstream>
#include <system_error>
#include <utility>

namespace config {
namespace {

constexpr std::size_t max_file_bytes = 1U << 20U;
constexpr std::size_t max_scalar_bytes = 4096;
constexpr std::size_t max_depth = 16;
constexpr std::size_t max_nodes = 50'000;

struct BadCharacter {
    std::size_t offset;
    std::string what;
};

// The character at `offset`: its code point and length in bytes; nothing where it is not UTF-8
// (RFC 3629: no overlong form, no surrogate, nothing above U+10FFFF).
std::optional<std::pair<char32_t, std::size_t>> decode(std::string_view text, std::size_t offset) {
    auto const byte = [&](std::size_t i) -> unsigned {
        return offset + i < text.size() ? static_cast<unsigned char>(text[offset + i]) : 0U;
    };
    unsigned const lead = byte(0);
    if (lead < 0x80) return std::pair{char32_t{lead}, std::size_t{1}};
    std::size_t const length = lead >= 0xF0 ? 4 : lead >= 0xE0 ? 3 : 2;
    if (lead < 0xC2 || lead > 0xF4) return std::nullopt;
    char32_t point = lead & (0x7FU >> length);
    for (std::size_t i = 1; i < length; ++i) {
        if ((byte(i) & 0xC0U) != 0x80U) return std::nullopt;
        point = (point << 6U) | (byte(i) & 0x3FU);
    }
    constexpr std::array<char32_t, 5> smallest{0, 0, 0x80, 0x800, 0x10000};
    bool const surrogate = point >= 0xD800 && point <= 0xDFFF;
    if (point < smallest[length] || surrogate || point > 0x10FFFF) return std::nullopt;
    return std::pair{point, length};
}

// Characters that a reader does not see, or sees where they are not: control characters but tab and
// line end, the byte order mark, and the marks that turn the direction of writing.
bool is_hidden(char32_t point) {
    bool const control = (point < 0x20 && point != '\t' && point != '\n') ||
                         (point >= 0x7F && point < 0xA0) || point == 0x2028 || point == 0x2029;
    bool const direction =
        (point >= 0x202A && point <= 0x202E) || (point >= 0x2066 && point <= 0x2069);
    return control || direction || point == 0xFEFF;
}

std::optional<BadCharacter> first_bad_character(std::string_view text) {
    for (std::size_t offset = 0; offset < text.size();) {
        auto const character = decode(text, offset);
        if (!character) return BadCharacter{offset, "a byte that is not UTF-8"};
        auto const [point, length] = *character;
        bool const line_end = point == '\r' && text.substr(offset, 2) == "\r\n";
        if (is_hidden(point) && !line_end)
            return BadCharacter{
                offset, point == 0xFEFF
                            ? "a byte order mark"
                            : fmt::format("a hidden character (U+{:04X})", std::uint32_t{point})};
        offset += length;
    }
    return std::nullopt;
}

Place place_of(std::string_view text, std::size_t offset) {
    auto const before = text.substr(0, offset);
    auto const lines = std::ranges::count(before, '\n');
    auto const start = before.find_last_of('\n') + 1;  // npos + 1 is 0
    return {static_cast<int>(lines) + 1, static_cast<int>(offset - start) + 1};
}

Place place_of(YAML::Mark const& mark) {
    return mark.is_null() ? Place{} : Place{mark.line + 1, mark.column + 1};
}

// Thrown where reading on makes no sense; its fault is already on record.
struct Stop {};

// Builds the tree from the parser's events, which show what the parser's own tree hides: anchors,
// aliases, tags, repeated keys and documents.
class TreeBuilder final : public YAML::EventHandler {
public:
    explicit TreeBuilder(File& file) : file_{file} {}

    [[nodiscard]] std::optional<YamlNode>& root() { return root_; }

    void OnDocumentStart(YAML::Mark const& mark) override {
        if (++documents_ == 1) return;
        file_.fault(place_of(mark), "a second document begins",
                    "one document a file, its keys all at the same indentation");
        throw Stop{};
    }
    void OnDocumentEnd() override {}

    void OnNull(YAML::Mark const& mark, YAML::anchor_t /*anchor*/) override {
        // The mark of a value that is not written at all is that of whatever follows it.
        auto const here = text_at(mark);
        bool const written = here.starts_with('~') || here.starts_with("null") ||
                             here.starts_with("Null") || here.starts_with("NULL");
        Place const place = written || last_.line == 0 ? place_of(mark) : last_;
        add({.kind = YamlNode::Kind::nothing, .place = place});
    }

    void OnAlias(YAML::Mark const& mark, YAML::anchor_t /*anchor*/) override {
        file_.fault(place_of(mark), "an alias", "the value written out");
        add({.kind = YamlNode::Kind::unusable, .place = place_of(mark)});
    }

    void OnScalar(YAML::Mark const& mark, std::string const& tag, YAML::anchor_t /*anchor*/,
                  std::string const& value) override {
        YamlNode node{.kind = YamlNode::Kind::scalar, .place = place_of(mark), .text = value};
        node.quoted = tag == "!";
        if (!is_untagged(mark, tag)) node.kind = YamlNode::Kind::unusable;
        if (value.size() > max_scalar_bytes) {
            file_.fault(node.place, fmt::format("a value of {} bytes", value.size()),
                        fmt::format("at most {} bytes", max_scalar_bytes));
            node.kind = YamlNode::Kind::unusable;
        } else if (auto const bad = first_bad_character(value)) {
            file_.fault(node.place, bad->what + " in the value", "plain text");
            node.kind = YamlNode::Kind::unusable;
        }
        add(std::move(node));
    }

    void OnSequenceStart(YAML::Mark const& mark, std::string const& tag, YAML::anchor_t /*anchor*/,
                         YAML::EmitterStyle::value /*style*/) override {
        open(YamlNode::Kind::list, mark, tag);
    }
    void OnSequenceEnd() override { close(); }

    void OnMapStart(YAML::Mark const& mark, std::string const& tag, YAML::anchor_t /*anchor*/,
                    YAML::EmitterStyle::value /*style*/) override {
        open(YamlNode::Kind::map, mark, tag);
    }
    void OnMapEnd() override { close(); }

    void OnAnchor(YAML::Mark const& mark, std::string const& name) override {
        file_.fault(place_of(mark), "the anchor " + in_quotes("&" + name),
                    "every value written out where it is used");
    }

private:
    // A list or map that is still being read; a map's key waits for its value.
    struct Open {
        YamlNode node;
        std::optional<YamlNode> key;
        std::map<std::string, Place, std::less<>> keys;
    };

    [[nodiscard]] std::string_view text_at(YAML::Mark const& mark) const {
        std::string_view const text = file_.text();
        auto const position = static_cast<std::size_t>(mark.pos);  // in bytes
        return mark.pos >= 0 && position < text.size() ? text.substr(position) : "";
    }

    bool is_untagged(YAML::Mark const& mark, std::string const& tag) {
        bool const bare =
            tag.empty() || tag == "?" || (tag == "!" && !text_at(mark).starts_with('!'));
        if (!bare)
            file_.fault(place_of(mark), "the tag " + in_quotes(tag), "the value without a tag");
        return bare;
    }

    void open(YamlNode::Kind kind, YAML::Mark const& mark, std::string const& tag) {
        is_untagged(mark, tag);
        if (open_.size() == max_depth) {
            file_.fault(place_of(mark), fmt::format("more than {} levels of nesting", max_depth));
            throw Stop{};
        }
        count(place_of(mark));
        open_.push_back({.node = {.kind = kind, .place = place_of(mark)}, .key = {}, .keys = {}});
    }

    void close() {
        YamlNode node = std::move(open_.back().node);
        open_.pop_back();
        put(std::move(node));
    }

    void add(YamlNode node) {
        count(node.place);
        put(std::move(node));
    }

    void count(Place place) {
        last_ = place;
        if (++nodes_ <= max_nodes) return;
        file_.fault(place, fmt::format("more than {} values", max_nodes));
        throw Stop{};
    }

    void put(YamlNode node) {
        if (open_.empty()) {
            root_ = std::move(node);
            return;
        }
        auto& parent = open_.back();
        if (parent.node.kind == YamlNode::Kind::list) {
            parent.node.items.push_back(std::move(node));
        } else if (!parent.key) {
            parent.key = std::move(node);
        } else {
            YamlNode const key = *std::exchange(parent.key, std::nullopt);
            if (!is_new_key(parent, key)) return;
            node.key = key.text;
            node.key_place = key.place;
            parent.node.items.push_back(std::move(node));
        }
    }

    bool is_new_key(Open& map, YamlNode const& key) {
        if (key.kind == YamlNode::Kind::unusable) return false;
        if (key.kind != YamlNode::Kind::scalar) {
            file_.fault(key.place, "a key that is no word", "a word before the colon");
            return false;
        }
        if (key.text == "<<") {
            file_.fault(key.place, "the merge key '<<'", "the keys written out");
            return false;
        }
        auto const [first, is_new] = map.keys.try_emplace(key.text, key.place);
        if (!is_new)
            file_.fault(key.place,
                        fmt::format("the key {} stands twice, first at {}:{}", in_quotes(key.text),
                                    first->second.line, first->second.column),
                        "each key once");
        return is_new;
    }

    File& file_;
    std::vector<Open> open_;
    std::optional<YamlNode> root_;
    Place last_;
    std::size_t nodes_ = 0;
    int documents_ = 0;
};

// Reads a CSV file from front to back.
class CsvReader {
public:
    explicit CsvReader(File& file) : file_{file}, text_{file.text()} {}

    std::vector<std::vector<Cell>> rows() {
        std::vector<std::vector<Cell>> rows;
        while (at_ < text_.size()) rows.push_back(row());
        return rows;
    }

private:
    std::vector<Cell> row() {
        std::vector<Cell> cells;
        do {
            cells.push_back(next_is('"') ? quoted_cell() : bare_cell());
        } while (skip(","));
        if (at_ < text_.size() && !skip("\r\n") && !skip("\n"))
            stop(place(), "text after the end of a quoted cell", "a comma or a line end");
        return cells;
    }

    Cell bare_cell() {
        auto const end = std::min(text_.find_first_of(",\r\n", at_), text_.size());
        Cell cell{.text = std::string{text_.substr(at_, end - at_)}, .place = place()};
        if (cell.text.find('"') != std::string::npos)
            stop(cell.place, "a quote inside the cell " + in_quotes(cell.text),
                 "the whole cell in quotes, with each quote in it doubled");
        at_ = end;
        return cell;
    }

    Cell quoted_cell() {
        Cell cell{.place = place()};
        skip("\"");
        for (;;) {
            if (at_ == text_.size())
                stop(cell.place, "a quoted cell without its end", "a closing quote");
            bool const doubled = text_.substr(at_, 2) == "\"\"";
            if (next_is('"') && !doubled) break;
            cell.text += text_[at_];
            skip(text_.substr(at_, doubled ? 2 : 1));
        }
        skip("\"");
        return cell;
    }

    [[nodiscard]] bool next_is(char c) const { return at_ < text_.size() && text_[at_] == c; }

    bool skip(std::string_view what) {
        if (!text_.substr(at_).starts_with(what)) return false;
        at_ += what.size();
        if (what.ends_with('\n')) {
            ++line_;
            line_start_ = at_;
        }
        return true;
    }

    [[nodiscard]] Place place() const { return {line_, static_cast<int>(at_ - line_start_) + 1}; }

    [[noreturn]] void stop(Place place, std::string what, std::string expected) {
        file_.fault(place, std::move(what), std::move(expected));
        throw Stop{};
    }

    File& file_;
    std::string_view text_;
    std::size_t at_ = 0;
    std::size_t line_start_ = 0;
    int line_ = 1;
};

// Steps that turn one word into the other: a letter more, less or other, or two that changed
// places. Source: Damerau (1964), A technique for computer detection and correction of spelling
// errors, Communications of the ACM 7(3); here each place is edited at most once.
std::size_t spelling_distance(std::string_view a, std::string_view b) {
    std::vector<std::size_t> two_above;
    std::vector<std::size_t> above(b.size() + 1);
    std::iota(above.begin(), above.end(), std::size_t{0});
    for (std::size_t i = 1; i <= a.size(); ++i) {
        std::vector<std::size_t> row(b.size() + 1, i);
        for (std::size_t j = 1; j <= b.size(); ++j) {
            std::size_t const other = a[i - 1] == b[j - 1] ? 0 : 1;
            row[j] = std::min({above[j] + 1, row[j - 1] + 1, above[j - 1] + other});
            if (i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1])
                row[j] = std::min(row[j], two_above[j - 2] + 1);
        }
        two_above = std::exchange(above, std::move(row));
    }
    return above.back();
}

std::size_t digits(std::string_view text, std::size_t from) {
    auto const end = text.find_first_not_of("0123456789", from);
    return (end == std::string_view::npos ? text.size() : end) - from;
}

// The length of an unsigned decimal number at the start of the text, 0 for none.
std::size_t decimal_length(std::string_view text) {
    std::size_t const units = digits(text, 0);
    if (units == 0 || (units > 1 && text.front() == '0')) return 0;
    if (units == text.size() || text[units] != '.') return units;
    std::size_t const decimals = digits(text, units + 1);
    return decimals == 0 ? 0 : units + 1 + decimals;
}

template <class Number>
std::optional<Number> from_chars(std::string_view text) {
    Number value{};
    auto const [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
    if (error != std::errc{} || end != text.data() + text.size()) return std::nullopt;
    return value;
}

bool is_scalar(File& file, YamlNode const* node, std::string const& expected) {
    return node != nullptr && is_kind(file, *node, YamlNode::Kind::scalar, expected);
}

}  // namespace

std::string Fault::text() const {
    std::string text = file;
    if (line > 0) text += fmt::format(":{}:{}", line, column);
    text += ": " + what;
    if (!expected.empty()) text += ", expected " + expected;
    return text;
}

File::File(std::filesystem::path const& folder, std::string name) : name_{std::move(name)} {
    auto const path = folder / name_;
    std::error_code error;
    auto const status = std::filesystem::status(path, error);
    if (status.type() == std::filesystem::file_type::not_found) {
        fault({}, "the file is missing",
              fmt::format("it in {}; start from the example of that name", folder.string()));
        return;
    }
    if (!std::filesystem::is_regular_file(status)) {
        fault({}, error ? "cannot be read: " + error.message() : "is no regular file",
              "a text file");
        return;
    }
    std::ifstream stream{path, std::ios::binary};
    std::string text(max_file_bytes + 1, '\0');
    stream.read(text.data(), static_cast<std::streamsize>(text.size()));
    if (!stream.eof() && stream.fail()) {
        fault({}, "cannot be read", "a file that the user of this process may read");
        return;
    }
    text.resize(static_cast<std::size_t>(stream.gcount()));
    accept(std::move(text));
}

File File::from_text(std::string name, std::string text) {
    File file{std::move(name)};
    file.accept(std::move(text));
    return file;
}

void File::accept(std::string text) {
    if (text.size() > max_file_bytes) {
        fault({}, "the file is larger than 1 MiB", "a smaller file");
    } else if (text.find_first_not_of(" \t\r\n") == std::string::npos) {
        fault({}, "the file is empty", "its content; start from the example of that name");
    } else if (auto const bad = first_bad_character(text)) {
        fault(place_of(text, bad->offset), bad->what, "plain text in UTF-8");
    } else {
        text_ = std::move(text);
    }
}

void File::fault(Place place, std::string what, std::string expected) {
    faults_.push_back({name_, place.line, place.column, std::move(what), std::move(expected)});
}

YamlNode read_yaml(File& file) {
    if (file.text().empty()) return {};
    TreeBuilder builder{file};
    std::istringstream stream{file.text()};
    try {
        YAML::Parser parser{stream};
        if (!parser.HandleNextDocument(builder)) return {.kind = YamlNode::Kind::map};
        while (parser.HandleNextDocument(builder)) continue;
    } catch (YAML::Exception const& error) {
        file.fault(place_of(error.mark), "not readable as YAML, " + error.msg,
                   "closed brackets, even indentation, and quotes around text that holds ': '");
        return {};
    } catch (Stop const&) {
    }
    return std::move(builder.root()).value_or(YamlNode{});
}

std::vector<std::vector<Cell>> read_csv(File& file) {
    try {
        return CsvReader{file}.rows();
    } catch (Stop const&) {
        return {};
    }
}

std::optional<double> number(std::string_view text) {
    auto rest = text;
    if (rest.starts_with('-')) rest.remove_prefix(1);
    std::size_t const length = decimal_length(rest);
    if (length == 0) return std::nullopt;
    rest.remove_prefix(length);
    if (!rest.empty()) {
        if (rest.front() != 'e' && rest.front() != 'E') return std::nullopt;
        rest.remove_prefix(1);
        if (rest.starts_with('+') || rest.starts_with('-')) rest.remove_prefix(1);
        if (rest.empty() || digits(rest, 0) != rest.size()) return std::nullopt;
    }
    auto const value = from_chars<double>(text);
    if (!value) return std::nullopt;
    return *value + 0.0;  // minus zero is zero
}

std::optional<long> whole_number(std::string_view text) {
    if (digits(text, 0) != text.size() || decimal_length(text) != text.size()) return std::nullopt;
    return from_chars<long>(text);
}

std::optional<double> decimal(std::string_view text, int exponent) {
    if (text.empty() || decimal_length(text) != text.size()) return std::nullopt;
    return from_chars<double>(fmt::format("{}e{}", text, exponent));
}

std::string in_quotes(std::string_view text) {
    constexpr std::size_t longest = 60;
    if (text.size() <= longest) return fmt::format("'{}'", text);
    std::size_t end = longest;
    while (end > 0 && (static_cast<unsigned char>(text[end]) & 0xC0U) == 0x80U) --end;
    return fmt::format("'{}…'", text.substr(0, end));
}

std::string one_of(std::span<std::string_view const> words, std::string_view instead) {
    std::string text = words.size() > 1 ? "one of " : "";
    for (std::size_t i = 0; i < words.size(); ++i) {
        if (i > 0) text += i + 1 == words.size() ? " or " : ", ";
        text += words[i];
    }
    auto const distance = [&](std::string_view word) { return spelling_distance(word, instead); };
    auto const nearest = std::ranges::min_element(words, {}, distance);
    bool const near =
        !instead.empty() && nearest != words.end() && distance(*nearest) <= 1 + instead.size() / 4;
    return near ? fmt::format("{} (did you mean {}?)", text, in_quotes(*nearest)) : text;
}

bool is_code(std::string_view text) {
    return !text.empty() && text.front() != ' ' && text.back() != ' ' &&
           text.find(',') == std::string_view::npos &&
           std::ranges::none_of(text, [](char c) { return static_cast<unsigned char>(c) < 0x20; });
}

bool is_kind(File& file, YamlNode const& node, YamlNode::Kind kind, std::string const& expected) {
    if (node.kind == kind) return true;
    switch (node.kind) {
        case YamlNode::Kind::unusable:
            break;
        case YamlNode::Kind::nothing:
            file.fault(node.place, "no value", expected);
            break;
        case YamlNode::Kind::scalar:
            file.fault(node.place, in_quotes(node.text), expected);
            break;
        case YamlNode::Kind::list:
            file.fault(node.place, "a list", expected);
            break;
        case YamlNode::Kind::map:
            file.fault(node.place, "a map of keys and values", expected);
            break;
    }
    return false;
}

std::optional<std::string> read_text(File& file, YamlNode const* node,
                                     std::string const& expected) {
    if (!is_scalar(file, node, expected)) return std::nullopt;
    auto text = node->text;
    while (text.ends_with('\n')) text.pop_back();  // what a block scalar ends with
    if (text.find('\n') == std::string::npos) return text;
    file.fault(node->place, "more than one line", expected);
    return std::nullopt;
}

std::optional<std::string> read_code(File& file, YamlNode const* node,
                                     std::string const& expected) {
    if (!is_scalar(file, node, expected)) return std::nullopt;
    if (is_code(node->text)) return node->text;
    file.fault(node->place, in_quotes(node->text),
               expected + " without a comma, a line break or a blank at its ends");
    return std::nullopt;
}

std::optional<double> read_number(File& file, YamlNode const* node, std::string const& expected,
                                  bool (*in_domain)(double)) {
    if (!is_scalar(file, node, expected)) return std::nullopt;
    auto const value = number(node->text);
    if (node->quoted) {
        file.fault(node->place, in_quotes(node->text) + " in quotes is text", expected);
    } else if (!value) {
        file.fault(node->place, in_quotes(node->text) + " is no plain number", expected);
    } else if (!in_domain(*value)) {
        file.fault(node->place, in_quotes(node->text) + " is out of range", expected);
    } else {
        return value;
    }
    return std::nullopt;
}

std::optional<long> read_whole(File& file, YamlNode const* node, long min, long max) {
    auto const expected = fmt::format("a whole number from {} to {}", min, max);
    if (!is_scalar(file, node, expected)) return std::nullopt;
    auto const value = node->quoted ? std::nullopt : whole_number(node->text);
    if (value && *value >= min && *value <= max) return value;
    file.fault(node->place, in_quotes(node->text) + (node->quoted ? " in quotes is text" : ""),
               expected);
    return std::nullopt;
}

std::optional<std::string_view> read_word(File& file, YamlNode const* node,
                                          std::span<std::string_view const> words) {
    if (!is_scalar(file, node, one_of(words))) return std::nullopt;
    auto const found = std::ranges::find(words, node->text);
    if (found != words.end()) return *found;
    file.fault(node->place, "unknown word " + in_quotes(node->text), one_of(words, node->text));
    return std::nullopt;
}

Keys::Keys(File& file, YamlNode const& map)
    : file_{file},
      place_{map.place},
      is_map_{is_kind(file, map, YamlNode::Kind::map, "keys and values")} {
    if (!is_map_) return;
    for (auto const& item : map.items) left_.push_back(&item);
}

YamlNode const* Keys::take(std::string_view key) {
    auto const found = std::ranges::find(left_, key, &YamlNode::key);
    if (found == left_.end()) return nullptr;
    auto const* const item = *found;
    left_.erase(found);
    return item;
}

YamlNode const* Keys::find(std::string_view key) {
    known_.push_back(key);
    return take(key);
}

YamlNode const* Keys::require(std::string_view key) {
    auto const* const item = find(key);
    if (item == nullptr && is_map_) file_.fault(place_, "a key is missing", in_quotes(key));
    return item;
}

void Keys::refuse_later(std::initializer_list<std::string_view> keys) {
    for (auto const key : keys)
        if (auto const* const item = take(key))
            file_.fault(item->key_place, in_quotes(key) + " is not yet available");
}

void Keys::finish() {
    for (auto const* const item : left_)
        file_.fault(item->key_place, "unknown key " + in_quotes(item->key),
                    one_of(known_, item->key));
}

}  // namespace config
