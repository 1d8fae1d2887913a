#include "daemon/print.hpp"

#include "alerts/cause.hpp"

#include <fmt/format.h>
#include <nlohmann/json.hpp>

#include <algorithm>
#include <charconv>
#include <cmath>

namespace process {
namespace {

using Json = nlohmann::ordered_json;

bool is_number(Column const& column) {
    return column.kind == Column::Kind::integer || column.kind == Column::Kind::figure;
}

std::vector<std::string> items_of(std::string_view array) {
    std::vector<std::string> items;
    std::string item;
    bool quoted = false;
    for (std::size_t i = 1; i + 1 < array.size(); ++i) {
        char const c = array[i];
        if (c == '"') {
            quoted = !quoted;
        } else if (c == '\\') {
            item += array[++i];
        } else if (c == ',' && !quoted) {
            items.push_back(std::move(item));
            item.clear();
        } else {
            item += c;
        }
    }
    if (!item.empty()) items.push_back(std::move(item));
    return items;
}

std::string for_reader(Column const& column, Cell const& cell) {
    if (!cell) return "";
    switch (column.kind) {
        case Column::Kind::figure:
            return readable_figure(*cell);
        case Column::Kind::list:
            return visible(fmt::format("{}", fmt::join(items_of(*cell), " ")));
        default:
            return visible(*cell);
    }
}

// How many columns a text takes: continuation bytes of UTF-8 take none.
std::size_t width_of(std::string_view text) {
    return static_cast<std::size_t>(
        std::ranges::count_if(text, [](char c) { return (c & 0xC0) != 0x80; }));
}

void print_table(std::ostream& out, Rows const& rows) {
    std::vector<std::vector<std::string>> lines(rows.rows.size());
    std::vector<std::size_t> widths;
    for (auto const& column : rows.columns) widths.push_back(width_of(column.name));
    for (std::size_t r = 0; r < rows.rows.size(); ++r)
        for (std::size_t c = 0; c < rows.columns.size(); ++c) {
            lines[r].push_back(for_reader(rows.columns[c], rows.rows[r][c]));
            widths[c] = std::max(widths[c], width_of(lines[r][c]));
        }
    auto const write = [&](auto const& texts) {
        std::string line;
        for (std::size_t c = 0; c < rows.columns.size(); ++c) {
            std::string const& text = texts(c);
            std::string const pad(widths[c] - width_of(text), ' ');
            line += is_number(rows.columns[c]) ? pad + text : text + pad;
            line += "  ";
        }
        line.erase(line.find_last_not_of(' ') + 1);
        out << line << '\n';
    };
    write([&](std::size_t c) -> std::string const& { return rows.columns[c].name; });
    for (auto const& line : lines)
        write([&](std::size_t c) -> std::string const& { return line[c]; });
}

std::string csv_cell(Column const& column, Cell const& cell) {
    if (!cell) return "";
    if (is_number(column)) return *cell;
    std::string text = column.kind == Column::Kind::list
                           ? fmt::format("{}", fmt::join(items_of(*cell), " "))
                           : *cell;
    if (!text.empty() && std::string_view{"=+-@\t\r"}.find(text.front()) != std::string_view::npos)
        text.insert(text.begin(), '\'');
    if (text.find_first_of(",\"\r\n") == std::string::npos) return text;
    std::string quoted = "\"";
    for (char const c : text) {
        if (c == '"') quoted += '"';
        quoted += c;
    }
    return quoted + '"';
}

void print_csv(std::ostream& out, Rows const& rows) {
    auto const write = [&](auto const& cell) {
        for (std::size_t c = 0; c < rows.columns.size(); ++c) out << (c == 0 ? "" : ",") << cell(c);
        out << "\r\n";
    };
    write([&](std::size_t c) { return rows.columns[c].name; });
    for (auto const& row : rows.rows)
        write([&](std::size_t c) { return csv_cell(rows.columns[c], row[c]); });
}

Json json_cell(Column const& column, Cell const& cell) {
    if (!cell) return nullptr;
    switch (column.kind) {
        case Column::Kind::integer:
        case Column::Kind::figure: {
            auto number = Json::parse(*cell, nullptr, false);
            return number.is_discarded() ? Json(*cell) : number;  // NaN is no JSON number
        }
        case Column::Kind::list:
            return items_of(*cell);
        case Column::Kind::json:
            return Json::parse(*cell);
        default:
            return *cell;
    }
}

Json json_row(Rows const& rows, std::vector<Cell> const& row) {
    auto object = Json::object();
    for (std::size_t c = 0; c < rows.columns.size(); ++c)
        object[rows.columns[c].name] = json_cell(rows.columns[c], row[c]);
    return object;
}

Json json_rows(Rows const& rows) {
    auto array = Json::array();
    for (auto const& row : rows.rows) array.push_back(json_row(rows, row));
    return array;
}

}  // namespace

std::string visible(std::string_view text) {
    std::string shown;
    for (char const c : text) {
        auto const byte = static_cast<unsigned char>(c);
        if (byte < 0x20 || byte == 0x7f)
            shown += fmt::format("\\x{:02X}", byte);
        else
            shown += c;
    }
    return shown;
}

std::string readable_figure(std::string const& exact) {
    double value = 0.0;
    auto const [end, error] = std::from_chars(exact.data(), exact.data() + exact.size(), value);
    if (error != std::errc{} || !std::isfinite(value)) return exact;
    return alerts::scaled(value);
}

void print(std::ostream& out, Rows const& rows, Format format) {
    switch (format) {
        case Format::table:
            print_table(out, rows);
            break;
        case Format::csv:
            print_csv(out, rows);
            break;
        case Format::json:
            out << json_rows(rows).dump(2) << '\n';
            break;
    }
}

void print_one(std::ostream& out, Rows const& rows, Format format) {
    if (format == Format::csv) return print_csv(out, rows);
    if (format == Format::json) {
        out << json_object(rows) << '\n';
        return;
    }
    std::size_t width = 0;
    for (auto const& column : rows.columns) width = std::max(width, column.name.size());
    for (std::size_t c = 0; c < rows.columns.size(); ++c) {
        auto const text = for_reader(rows.columns[c], rows.rows.at(0)[c]);
        if (!text.empty() && rows.columns[c].kind != Column::Kind::json)
            out << fmt::format("{:<{}}  {}\n", rows.columns[c].name, width, text);
    }
}

std::string json_object(Rows const& rows, std::span<std::pair<std::string, Rows> const> inside) {
    auto object = json_row(rows, rows.rows.at(0));
    for (auto const& [name, more] : inside) object[name] = json_rows(more);
    return object.dump(2);
}

}  // namespace process
