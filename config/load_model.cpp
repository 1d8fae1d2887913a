#include "config/parts.hpp"
#include "model/dependence.hpp"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <deque>
#include <limits>
#include <optional>
#include <utility>

namespace config {
namespace {

constexpr long max_grades = 50;
constexpr long max_days = 36'500;
constexpr double row_sum_tolerance = 2e-4 + 1e-12;  // the second part is the sum's own rounding
constexpr double correlation_tolerance = 1e-12;
constexpr double least_variance = 1e-9;

using Names = std::vector<std::string>;
using Rows = std::vector<std::vector<Cell>>;

bool is_fraction(double x) {
    return x >= 0.0 && x <= 1.0;
}
bool is_correlation(double x) {
    return x >= -1.0 && x <= 1.0;
}
bool is_asset_correlation(double x) {
    return x >= 0.0 && x <= 0.99;
}
bool is_weight(double x) {
    return x > 0.0 && x <= 1000.0;
}

std::string joined(Names const& names) {
    return fmt::format("{}", fmt::join(names, ","));
}

// "all", or a kind and a code such as "sector:RETAIL" and "country:others".
bool is_index_name(std::string_view name) {
    if (name == "all") return true;
    for (std::string_view const kind : {"sector:", "country:"})
        if (name.starts_with(kind)) {
            auto const code = name.substr(kind.size());
            return is_code(code) &&
                   (!model::is_reserved(code) || code == "others" || code == "unknown");
        }
    return false;
}

// A table of numbers with a name to each row and column. What could not be read is not a number.
struct Matrix {
    Eigen::MatrixXd values;
    std::vector<std::vector<Place>> places;  // of the values
    std::vector<Place> row_places;
};

// Reads one row for each name, in that order, below a header that names the columns.
class MatrixReader {
public:
    MatrixReader(File& file, Names row_names, Names column_names, std::string expected,
                 bool (*in_domain)(double))
        : file_{file},
          row_names_{std::move(row_names)},
          column_names_{std::move(column_names)},
          expected_{std::move(expected)},
          in_domain_{in_domain} {
        auto const rows = row_names_.size();
        auto const columns = column_names_.size();
        matrix_.values.setConstant(static_cast<Eigen::Index>(rows),
                                   static_cast<Eigen::Index>(columns),
                                   std::numeric_limits<double>::quiet_NaN());
        matrix_.places.assign(rows, std::vector<Place>(columns));
        matrix_.row_places.resize(rows);
    }

    Matrix read(Rows const& rows, std::string const& corner) {
        if (rows.empty() || !is_header(rows.front(), corner)) return matrix_;
        for (std::size_t i = 1; i < rows.size(); ++i) read_row(rows[i]);
        for (std::size_t row = 0; row < row_names_.size(); ++row)
            if (matrix_.row_places[row].line == 0)
                file_.fault({}, "no row " + in_quotes(row_names_[row]),
                            "a row for each of " + joined(row_names_));
        return matrix_;
    }

private:
    bool is_header(std::vector<Cell> const& cells, std::string const& corner) {
        Names expected{corner};
        expected.insert(expected.end(), column_names_.begin(), column_names_.end());
        Names found;
        for (auto const& cell : cells) found.push_back(cell.text);
        if (found == expected) return true;
        auto const [cell, _] = std::ranges::mismatch(found, expected);
        bool const too_short = cell == found.end();
        auto const at = static_cast<std::size_t>(cell - found.begin());
        file_.fault(cells[too_short ? cells.size() - 1 : at].place,
                    too_short ? fmt::format("a header of {} columns", cells.size())
                              : "the column " + in_quotes(*cell),
                    "the header " + joined(expected));
        return false;
    }

    void read_row(std::vector<Cell> const& cells) {
        auto const& [name, place] = cells.front();
        auto const found = std::ranges::find(row_names_, name);
        auto const row = static_cast<std::size_t>(found - row_names_.begin());
        if (cells.size() == 1 && name.empty()) {
            file_.fault(place, "an empty line", "none");
        } else if (found == row_names_.end()) {
            file_.fault(place, "the row " + in_quotes(name), "one of " + joined(row_names_));
        } else if (matrix_.row_places[row].line > 0) {
            file_.fault(place,
                        fmt::format("the row {} stands twice, first in line {}", in_quotes(name),
                                    matrix_.row_places[row].line),
                        "each row once");
        } else {
            matrix_.row_places[row] = place;
            if (row < last_row_)
                file_.fault(place, fmt::format("the row {} is out of order", in_quotes(name)),
                            "the order " + joined(row_names_));
            last_row_ = std::max(last_row_, row);
            read_cells(cells, row);
        }
    }

    void read_cells(std::vector<Cell> const& cells, std::size_t row) {
        if (cells.size() != column_names_.size() + 1) {
            file_.fault(
                cells.front().place,
                fmt::format("{} cells in the row {}", cells.size(), in_quotes(row_names_[row])),
                fmt::format("{}", column_names_.size() + 1));
            return;
        }
        for (std::size_t column = 0; column < column_names_.size(); ++column) {
            auto const& cell = cells[column + 1];
            YamlNode const node{
                .kind = YamlNode::Kind::scalar, .place = cell.place, .text = cell.text};
            matrix_.places[row][column] = cell.place;
            if (auto const value = read_number(file_, &node, expected_, in_domain_))
                matrix_.values(static_cast<Eigen::Index>(row), static_cast<Eigen::Index>(column)) =
                    *value;
        }
    }

    File& file_;
    Names row_names_;
    Names column_names_;
    std::string expected_;
    bool (*in_domain_)(double);
    Matrix matrix_;
    std::size_t last_row_ = 0;
};

class ModelReader {
public:
    explicit ModelReader(std::filesystem::path const& folder)
        : folder_{folder}, file_{folder, "model.yaml"} {}

    Part<model::Settings> read() {
        YamlNode const root = read_yaml(file_);
        Keys keys{file_, root};
        read_currency(keys.require("base_currency"));
        read_horizon(keys.require("horizon_years"));
        if (auto const confidence = read_number(file_, keys.require("confidence"),
                                                "a number between 0.5 and 1 such as 0.999",
                                                [](double x) { return x > 0.5 && x < 1.0; }))
            settings_.confidence = *confidence;
        read_grades(keys.require("grades"));
        read_transition(keys.require("transition_matrix"));
        read_loss(keys.require("loss"), keys.find("grade_values"));
        read_recovery(keys.require("loss_given_default"),
                      keys.find("loss_given_default_deviation"));
        read_conversion(keys.require("conversion_factor"));
        auto const* const weights = keys.require("index_weights");
        read_weights(weights);
        read_indices(keys.require("systematic_indices"), weights);
        read_asset_correlation(keys.require("asset_correlation"));
        read_sources(keys.require("rating_sources"));
        read_days(keys.require("rating_max_age_days"), settings_.rating_max_age_days);
        read_unrated(keys.require("unrated_as"));
        read_days(keys.require("fx_max_age_days"), settings_.fx_max_age_days);
        read_simulation(keys.require("simulation"));
        keys.finish();

        side_files_.push_front(std::move(file_));
        return {std::move(settings_), std::move(side_files_)};
    }

private:
    void read_currency(YamlNode const* node) {
        auto const expected = "an ISO 4217 code such as EUR";
        auto const text = read_text(file_, node, expected);
        if (!text) return;
        bool const letters =
            std::ranges::all_of(*text, [](char c) { return c >= 'A' && c <= 'Z'; });
        if (text->size() == 3 && letters)
            settings_.base_currency = *text;
        else
            file_.fault(node->place, in_quotes(*text), expected);
    }

    void read_horizon(YamlNode const* node) {
        constexpr long longest = 50;
        auto const years = node != nullptr && !node->quoted ? number(node->text) : std::nullopt;
        if (years && *years > 0.0 && *years != std::floor(*years)) {
            file_.fault(node->place, "a horizon of part years is not yet available",
                        fmt::format("a whole number from 1 to {}", longest));
        } else if (auto const whole = read_whole(file_, node, 1, longest)) {
            settings_.horizon_years = static_cast<int>(*whole);
        }
    }

    void read_grades(YamlNode const* node) {
        if (node == nullptr ||
            !is_kind(file_, *node, YamlNode::Kind::list, "the grades, best first"))
            return;
        auto names = read_names(*node, "a grade");
        if (std::ssize(node->items) > max_grades)
            file_.fault(node->place, fmt::format("{} grades", node->items.size()),
                        fmt::format("at most {}", max_grades));
        else if (names)
            settings_.grades = model::GradeScale{std::move(*names)};
    }

    // A list of codes, at least one and each once; nothing where one has a fault.
    std::optional<Names> read_names(YamlNode const& list, std::string const& expected) {
        Names names;
        bool good = !list.items.empty();
        if (!good) file_.fault(list.place, "an empty list", expected);
        for (auto const& item : list.items) {
            auto const name = read_code(file_, &item, expected);
            if (!name) {
                good = false;
            } else if (model::is_reserved(*name)) {
                good = false;
                file_.fault(item.place, "the reserved word " + in_quotes(*name), expected);
            } else if (std::ranges::find(names, *name) != names.end()) {
                good = false;
                file_.fault(item.place, in_quotes(*name) + " stands twice", "each once");
            } else {
                names.push_back(*name);
            }
        }
        return good ? std::optional{std::move(names)} : std::nullopt;
    }

    [[nodiscard]] bool has_grades() const { return settings_.grades.size() > 0; }

    [[nodiscard]] Names grade_names() const {
        Names names;
        for (std::size_t rank = 0; rank < settings_.grades.size(); ++rank)
            names.emplace_back(settings_.grades.name({static_cast<std::uint8_t>(rank)}));
        return names;
    }

    // The CSV file a key names, opened; nothing where it names none.
    File* open_side_file(YamlNode const* node) {
        auto const expected = "the name of a file in the same folder";
        auto const name = read_text(file_, node, expected);
        if (!name) return nullptr;
        if (name->empty() || name->starts_with('.') ||
            name->find_first_of("/\\\t") != std::string::npos) {
            file_.fault(node->place, in_quotes(*name), expected);
            return nullptr;
        }
        return &side_files_.emplace_back(folder_, *name);
    }

    void read_transition(YamlNode const* node) {
        auto* const file = open_side_file(node);
        if (file == nullptr) return;
        auto const rows = read_csv(*file);
        if (!has_grades()) return;
        auto columns = grade_names();
        columns.emplace_back("default");
        auto matrix =
            MatrixReader{*file, grade_names(), columns, "a probability from 0 to 1", is_fraction}
                .read(rows, "from");
        for (Eigen::Index row = 0; row < matrix.values.rows(); ++row) {
            double const sum = matrix.values.row(row).sum();
            if (std::abs(sum - 1.0) > row_sum_tolerance)  // never true where a cell has a fault
                file->fault(matrix.row_places[static_cast<std::size_t>(row)],
                            fmt::format("the row sums to {:.6g}", sum), "1, within 0.0002");
        }
        settings_.transition = std::move(matrix.values);
    }

    void read_loss(YamlNode const* node, YamlNode const* grade_values) {
        constexpr std::array<std::string_view, 2> words{"default_only", "revaluation"};
        auto const loss = read_word(file_, node, words);
        if (!loss) return;
        bool const revaluation = *loss == "revaluation";
        if (revaluation) settings_.loss = model::LossKind::revaluation;
        if (revaluation && grade_values == nullptr)
            file_.fault(node->place, "revaluation without values", "the key 'grade_values'");
        if (!revaluation && grade_values != nullptr)
            file_.fault(grade_values->key_place, "'grade_values' has no effect with default_only",
                        "loss: revaluation, or this key left out");
        if (!revaluation) return;
        auto* const file = open_side_file(grade_values);
        if (file == nullptr) return;
        auto const rows = read_csv(*file);
        if (!has_grades()) return;
        settings_.grade_values =
            MatrixReader{*file, grade_names(), grade_names(),
                         "a loss per unit of exposure from -1 to 1", is_correlation}
                .read(rows, "from")
                .values;
    }

    void read_recovery(YamlNode const* mean_node, YamlNode const* deviation_node) {
        auto const mean = read_number(file_, mean_node, "a number from 0 to 1", is_fraction);
        auto const deviation =
            read_number(file_, deviation_node, "a number from 0 to 1", is_fraction);
        if (mean) settings_.loss_given_default = *model::Fraction::from_fraction(*mean);
        settings_.loss_given_default_deviation = deviation.value_or(0.0);
        if (!mean || !deviation || *deviation == 0.0) return;
        // Beyond this no distribution on [0, 1] has that mean and deviation.
        double const largest_variance = *mean * (1.0 - *mean);
        if (*deviation * *deviation >= largest_variance)
            file_.fault(deviation_node->place,
                        fmt::format("a deviation of {} with a mean of {}", *deviation, *mean),
                        fmt::format("0, or less than {:.4g}", std::sqrt(largest_variance)));
    }

    void read_conversion(YamlNode const* node) {
        if (node == nullptr ||
            !is_kind(file_, *node, YamlNode::Kind::map, "a factor by product, and others"))
            return;
        for (auto const& item : node->items) {
            if (!is_code(item.key)) file_.fault(item.key_place, in_quotes(item.key), "a product");
            if (auto const factor = read_number(file_, &item, "a number from 0 to 1", is_fraction))
                settings_.conversion_factor.emplace(item.key,
                                                    *model::Fraction::from_fraction(*factor));
        }
        if (std::ranges::find(node->items, "others", &YamlNode::key) == node->items.end())
            file_.fault(node->place, "no factor for products that are not listed", "'others'");
    }

    void read_weights(YamlNode const* node) {
        if (node == nullptr) return;
        Keys keys{file_, *node};
        auto const read = [&](char const* key, double& weight) {
            auto const* const item = keys.find(key);
            weight =
                read_number(file_, item, "a number above 0, at most 1000", is_weight).value_or(0.0);
            return item != nullptr;
        };
        auto& [all, sector, country] = settings_.index_weights;
        bool const has_all = read("all", all);
        bool const has_sector = read("sector", sector);
        bool const has_country = read("country", country);
        keys.finish();
        if (node->kind == YamlNode::Kind::map && has_all == (has_sector || has_country))
            file_.fault(node->place, has_all ? "'all' beside other kinds" : "no weights",
                        "{all: 1.0}, or weights of sector, country or both");
    }

    void read_indices(YamlNode const* node, YamlNode const* weights) {
        auto* const file = open_side_file(node);
        if (file == nullptr) return;
        auto const rows = read_csv(*file);
        if (rows.empty()) return;
        auto const names = read_index_names(*file, rows.front());
        if (!names) return;
        auto matrix =
            MatrixReader{*file, *names, *names, "a correlation from -1 to 1", is_correlation}.read(
                rows, "index");
        check_correlations(*file, *names, matrix);
        if (weights != nullptr) check_weighted(*file, *names, matrix, weights->place);
        settings_.indices = {*names, std::move(matrix.values)};
    }

    static std::optional<Names> read_index_names(File& file, std::vector<Cell> const& header) {
        Names names;
        bool good = true;
        auto const fault = [&](Cell const& cell, std::string what, std::string expected) {
            file.fault(cell.place, std::move(what), std::move(expected));
            good = false;
        };
        for (auto cell = header.begin() + 1; cell != header.end(); ++cell) {
            if (!is_index_name(cell->text))
                fault(*cell, "the index " + in_quotes(cell->text),
                      "sector:CODE, country:CODE, sector:others, country:others or all");
            else if (std::ranges::find(names, cell->text) != names.end())
                fault(*cell, "the index " + in_quotes(cell->text) + " stands twice", "each once");
            else if (cell->text == "all" && header.size() > 2)
                fault(*cell, "the index 'all' beside others", "it alone");
            names.push_back(cell->text);
        }
        if (names.empty()) fault(header.front(), "no index", "index,<names>");
        return good ? std::optional{std::move(names)} : std::nullopt;
    }

    static void check_correlations(File& file, Names const& names, Matrix const& matrix) {
        auto const& values = matrix.values;
        for (Eigen::Index row = 0; row < values.rows(); ++row) {
            for (Eigen::Index column = 0; column <= row; ++column) {
                auto const i = static_cast<std::size_t>(row);
                auto const j = static_cast<std::size_t>(column);
                double const value = values(row, column);
                double const mirrored = values(column, row);
                if (i == j && std::abs(value - 1.0) > correlation_tolerance)
                    file.fault(matrix.places[i][i],
                               fmt::format("{} of {} with itself", value, in_quotes(names[i])),
                               "1");
                if (std::abs(value - mirrored) > correlation_tolerance)
                    file.fault(
                        matrix.places[i][j],
                        fmt::format("{} here, but {} for the same pair at {}:{}", value, mirrored,
                                    matrix.places[j][i].line, matrix.places[j][i].column),
                        "the same correlation both ways");
            }
        }
        if (!file.faults().empty()) return;
        double const smallest = model::smallest_eigenvalue(values);
        if (smallest < -1e-10 * static_cast<double>(values.rows()))
            file.fault({},
                       fmt::format("the matrix is not positive semi-definite, its smallest "
                                   "eigenvalue is {:.6g}",
                                   smallest),
                       "correlations that can hold together, none of its eigenvalues below 0");
    }

    // Whether every index the weights can ask for is there, and has a variance left to rescale.
    void check_weighted(File& file, Names const& names, Matrix const& matrix, Place weights) {
        auto const& [all, sector, country] = settings_.index_weights;
        auto const require = [&](double weight, std::string const& name) {
            if (weight > 0.0 && std::ranges::find(names, name) == names.end())
                file_.fault(weights, fmt::format("no index {} in {}", in_quotes(name), file.name()),
                            "one for all that has no index of its own");
        };
        require(all, "all");
        require(sector, "sector:others");
        require(country, "country:others");
        if (!(sector > 0.0 && country > 0.0)) return;
        for (std::size_t i = 0; i < names.size(); ++i) {
            for (std::size_t j = 0; j < names.size(); ++j) {
                if (!names[i].starts_with("sector:") || !names[j].starts_with("country:")) continue;
                double const correlation =
                    matrix.values(static_cast<Eigen::Index>(i), static_cast<Eigen::Index>(j));
                double const variance =
                    sector * sector + country * country + 2.0 * sector * country * correlation;
                if (variance <= least_variance)
                    file.fault(matrix.places[i][j],
                               fmt::format("{} and {} cancel out under these index_weights",
                                           in_quotes(names[i]), in_quotes(names[j])),
                               "a correlation further from -1");
            }
        }
    }

    void read_asset_correlation(YamlNode const* node) {
        auto const expected = "a number from 0 to 0.99, or one for each grade";
        if (node == nullptr) return;
        if (node->kind != YamlNode::Kind::map) {
            if (auto const value = read_number(file_, node, expected, is_asset_correlation))
                settings_.asset_correlation.assign(settings_.grades.size(), *value);
            return;
        }
        Keys keys{file_, *node};
        if (!has_grades()) return;
        auto const grades = grade_names();  // outlives the keys' own look at them
        for (auto const& grade : grades)
            settings_.asset_correlation.push_back(
                read_number(file_, keys.require(grade), expected, is_asset_correlation)
                    .value_or(0.0));
        keys.finish();
    }

    void read_sources(YamlNode const* node) {
        auto const expected = "rating sources, the first that has a rating wins";
        if (node == nullptr || !is_kind(file_, *node, YamlNode::Kind::list, expected)) return;
        settings_.rating_sources = read_names(*node, "a rating source").value_or(Names{});
    }

    void read_days(YamlNode const* node, int& days) {
        if (auto const value = read_whole(file_, node, 0, max_days))
            days = static_cast<int>(*value);
    }

    void read_unrated(YamlNode const* node) {
        if (!has_grades()) return;
        auto const grades = grade_names();
        std::vector<std::string_view> const words{grades.begin(), grades.end()};
        if (auto const grade = read_word(file_, node, words))
            settings_.unrated_as = *settings_.grades.find(*grade);
    }

    void read_simulation(YamlNode const* node) {
        if (node == nullptr) return;
        Keys keys{file_, *node};
        if (auto const scenarios = read_whole(file_, keys.require("scenarios"), 1'000, 100'000'000))
            settings_.simulation.scenarios = static_cast<std::uint64_t>(*scenarios);
        if (auto const seed =
                read_whole(file_, keys.require("seed"), 0, std::numeric_limits<long>::max()))
            settings_.simulation.seed = static_cast<std::uint64_t>(*seed);
        keys.finish();
    }

    std::filesystem::path const& folder_;
    File file_;
    model::Settings settings_;
    std::deque<File> side_files_;  // a deque, as files are pointed at while others are added
};

}  // namespace

Part<model::Settings> read_model(std::filesystem::path const& folder) {
    return ModelReader{folder}.read();
}

}  // namespace config
