#include "model/dependence.hpp"

#include <Eigen/Eigenvalues>

#include <algorithm>
#include <cmath>
#include <numbers>
#include <optional>
#include <stdexcept>
#include <string>

namespace model {
namespace {

std::optional<std::uint32_t> find(std::vector<std::string> const& names, std::string_view kind,
                                  std::string_view code) {
    std::string const wanted = std::string{kind} + ":" + std::string{code};
    auto const found = std::ranges::find(names, wanted);
    if (found == names.end()) return std::nullopt;
    return static_cast<std::uint32_t>(found - names.begin());
}

std::uint32_t find_or_others(std::vector<std::string> const& names, std::string_view kind,
                             std::string_view code) {
    if (auto const own = find(names, kind, code)) return *own;
    if (auto const others = find(names, kind, "others")) return *others;
    throw std::domain_error("no index " + std::string{kind} + ":others");
}

}  // namespace

double smallest_eigenvalue(Eigen::MatrixXd const& symmetric) {
    Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> const solver{symmetric, Eigen::EigenvaluesOnly};
    return solver.eigenvalues().minCoeff();
}

bool has_index(Settings const& settings, std::string_view sector, std::string_view country) {
    auto const& [all, sector_weight, country_weight] = settings.index_weights;
    auto const& names = settings.indices.names;
    return all > 0.0 || ((sector_weight <= 0.0 || find(names, "sector", sector)) &&
                         (country_weight <= 0.0 || find(names, "country", country)));
}

double normal_below(double x) {
    return 0.5 * std::erfc(-x / std::numbers::sqrt2);
}

double probability_below(double cut, double asset_correlation, double index) {
    return normal_below((cut - std::sqrt(asset_correlation) * index) /
                        std::sqrt(1.0 - asset_correlation));
}

Blend blend(Settings const& settings, std::string_view sector, std::string_view country) {
    auto const& [all, sector_weight, country_weight] = settings.index_weights;
    auto const& [names, correlation] = settings.indices;
    if (all > 0.0) return {};

    Blend result{.first_weight = sector_weight, .second_weight = country_weight};
    if (sector_weight > 0.0) result.first = find_or_others(names, "sector", sector);
    if (country_weight > 0.0) result.second = find_or_others(names, "country", country);
    if (sector_weight <= 0.0) result.first = result.second;
    if (country_weight <= 0.0) result.second = result.first;

    double const variance =
        sector_weight * sector_weight + country_weight * country_weight +
        2.0 * sector_weight * country_weight * correlation(result.first, result.second);
    if (!(variance > 1e-12))
        throw std::domain_error("the indices " + names[result.first] + " and " +
                                names[result.second] + " cancel out");
    result.first_weight /= std::sqrt(variance);
    result.second_weight /= std::sqrt(variance);
    return result;
}

Eigen::MatrixXd factor(Eigen::MatrixXd const& correlation) {
    Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> const solver{correlation};
    auto const& variances = solver.eigenvalues();  // ascending
    auto const rounding = 1e-14 * static_cast<double>(variances.size());
    auto const kept = (variances.array() > rounding).count();
    return solver.eigenvectors().rightCols(kept) * variances.tail(kept).cwiseSqrt().asDiagonal();
}

}  // namespace model
