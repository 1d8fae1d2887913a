#pragma once

#include "daemon/tables.hpp"

#include <ostream>
#include <string>

// The one way results are shown: a table for readers, CSV and JSON with exact values.

namespace process {

enum class Format { table, csv, json };

inline constexpr std::pair<Format, std::string_view> format_words[] = {
    {Format::table, "table"}, {Format::csv, "csv"}, {Format::json, "json"}};

// RFC 4180 with a header; a text that a spreadsheet would run as a formula gets a ' before it.
// JSON: an array of objects, numbers as numbers, NULL as null.
void print(std::ostream& out, Rows const& rows, Format format);

// One row, a column a line; `json` and `csv` as above.
void print_one(std::ostream& out, Rows const& rows, Format format);

// One row as a JSON object with more under other names.
std::string json_object(Rows const& rows,
                        std::span<std::pair<std::string, Rows> const> inside = {});

// Control characters are shown, not obeyed.
std::string visible(std::string_view text);

// A figure for a reader: four digits, with k, m or bn. Exact values are in CSV and JSON.
std::string readable_figure(std::string const& exact);

}  // namespace process
