#include "model/portfolio.hpp"

#include <Eigen/Eigenvalues>

#include <algorithm>
#include <cmath>
#include <numbers>
#include <set>

namespace model {
namespace {

// More kinds than this, and a grade's asset correlations become nodes.
constexpr std::size_t own_kinds_max = 256;
constexpr double node_step = 1.0 / 32.0;

double angle(double asset_correlation) {
    return std::asin(std::sqrt(asset_correlation));
}

double own_correlation(Name const& name, Settings const& settings) {
    return name.asset_correlation.value_or(settings.asset_correlation[name.grade.rank]);
}

// The independent factors behind the indices, those that names lean on most first: principal
// components of the indices, each with the weight its kind has in a name's.
Eigen::MatrixXd principal_loadings(Settings const& settings) {
    auto const& [all, sector, country] = settings.index_weights;
    Eigen::MatrixXd const factors = factor(settings.indices.correlation);
    Eigen::VectorXd weight(factors.rows());
    for (Eigen::Index i = 0; i < weight.size(); ++i) {
        auto const& name = settings.indices.names[static_cast<std::size_t>(i)];
        weight[i] = name.starts_with("sector:")    ? sector
                    : name.starts_with("country:") ? country
                                                   : all;
    }
    Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> const solver{
        factors.transpose() * weight.cwiseAbs2().asDiagonal() * factors};
    return factors * solver.eigenvectors().rowwise().reverse();
}

}  // namespace

Cells::Cells(std::span<std::shared_ptr<Name const> const> names, Settings const& settings)
    : settings_{&settings}, migration_{std::make_shared<Migration const>(settings)} {
    if (double const d = settings.loss_given_default_deviation; d > 0.0) {
        double const m = settings.loss_given_default.value();
        recovery_precision_ = m * (1.0 - m) / (d * d) - 1.0;
    }
    std::set<Kind> found;
    auto const grades = static_cast<std::uint8_t>(settings.grades.size());
    for (std::uint8_t grade = 0; grade < grades; ++grade)
        found.insert({grade, settings.asset_correlation[grade]});
    std::map<std::pair<std::uint32_t, std::uint32_t>, std::uint32_t> blend_of_indices;
    for (auto const& shared : names) {
        Name const& name = *shared;
        if (name.grade == settings.grades.in_default()) continue;
        if (found.size() <= own_kinds_max)
            found.insert({name.grade.rank, own_correlation(name, settings)});
        if (!blend_of(name)) {
            auto const indices = model::blend(settings, name.sector, name.country);
            auto const next = static_cast<std::uint32_t>(blends_.size());
            auto const [at, is_new] =
                blend_of_indices.try_emplace({indices.first, indices.second}, next);
            if (is_new) blends_.push_back(indices);
            blend_of_codes_[name.sector][name.country] = at->second;
        }
    }
    if (found.size() <= own_kinds_max) {
        kinds_.assign(found.begin(), found.end());
    } else {
        double lowest = 1.0;
        double highest = 0.0;
        for (auto const& name : names) {
            if (name->grade == settings.grades.in_default()) continue;
            double const rho = own_correlation(*name, settings);
            lowest = std::min(lowest, rho);
            highest = std::max(highest, rho);
        }
        double const first = std::max(0.0, angle(lowest) - node_step);
        double const last = std::min(std::numbers::pi / 2.0 - 1e-3, angle(highest) + node_step);
        auto const intervals =
            static_cast<int>(std::max(4.0, std::ceil((last - first) / node_step)));
        for (int n = 0; n <= intervals; ++n)
            nodes_.push_back(first + (last - first) * n / intervals);
        for (std::uint8_t grade = 0; grade < grades; ++grade)
            for (double const node : nodes_) kinds_.push_back({grade, std::pow(std::sin(node), 2)});
    }
    loadings_ = principal_loadings(settings);
}

std::optional<std::uint32_t> Cells::blend_of(Name const& name) const {
    auto const sector = blend_of_codes_.find(name.sector);
    if (sector == blend_of_codes_.end()) return std::nullopt;
    auto const country = sector->second.find(name.country);
    return country == sector->second.end() ? std::nullopt : std::optional{country->second};
}

std::optional<Stake> Cells::stake(Name const& name) const {
    Settings const& settings = *settings_;
    Stake stake;
    if (name.grade == settings.grades.in_default()) return stake;
    auto const blend = blend_of(name);
    if (!blend) return std::nullopt;
    stake.blend = *blend;
    stake.grade = name.grade.rank;
    stake.asset_correlation = own_correlation(name, settings);

    double const exposure = name.exposure_at_default.units();
    double const lost = name.loss_at_default;
    auto& [w1, w2, w3] = stake.on_default;
    w1 = lost;
    w2 = lost * lost;
    w3 = w2 * lost;
    if (recovery_precision_ > 0.0 && lost > 0.0 && lost < exposure) {
        double const m = lost / exposure;
        double const n = recovery_precision_;
        stake.beta_exposure = exposure;
        stake.beta_mean = m;
        w2 = exposure * exposure * m * (m * n + 1.0) / (n + 1.0);
        w3 = w2 * exposure * (m * n + 2.0) / (n + 2.0);
    }
    auto const row = migration_->matrix().row(name.grade.rank);
    bool const may_default = row[row.size() - 1] > 0.0;
    if (settings.loss == LossKind::revaluation) {
        auto const values = settings.grade_values.row(name.grade.rank);
        double const stays = exposure * values[name.grade.rank];
        stake.exposure = exposure;
        stake.base = stays;
        w3 += -3.0 * w2 * stays + 3.0 * w1 * stays * stays - stays * stays * stays;
        w2 += -2.0 * w1 * stays + stays * stays;
        w1 -= stays;
        for (Eigen::Index to = 0; to < values.size(); ++to)
            if (row[to] > 0.0)
                stake.largest = std::max(
                    stake.largest, std::abs(exposure * (values[to] - values[name.grade.rank])));
    }
    if (may_default) stake.largest = std::max({stake.largest, std::abs(w1), std::cbrt(w3)});
    stake.takes_part = stake.largest > 0.0;
    return stake;
}

bool Cells::has_kind(Stake const& stake) const {
    if (!stake.takes_part) return true;
    if (nodes_.empty())
        return std::ranges::binary_search(kinds_, Kind{stake.grade, stake.asset_correlation});
    double const place = angle(stake.asset_correlation);
    return place >= nodes_.front() && place <= nodes_.back();
}

Mixed Cells::mixed(Stake const& stake) const {
    Mixed mixed;
    if (nodes_.empty()) {
        auto const at =
            std::ranges::lower_bound(kinds_, Kind{stake.grade, stake.asset_correlation});
        mixed.kind[0] = static_cast<std::uint32_t>(at - kinds_.begin());
        return mixed;
    }
    double const step = nodes_[1] - nodes_[0];
    double const place = (angle(stake.asset_correlation) - nodes_[0]) / step;
    auto const last = static_cast<double>(nodes_.size()) - 4.0;
    auto const left = static_cast<std::uint32_t>(std::clamp(std::floor(place) - 1.0, 0.0, last));
    double const t = place - left;  // Lagrange's polynomials over 0, 1, 2, 3
    mixed.count = 4;
    mixed.weight = {-(t - 1.0) * (t - 2.0) * (t - 3.0) / 6.0, t * (t - 2.0) * (t - 3.0) / 2.0,
                    -t * (t - 1.0) * (t - 3.0) / 2.0, t * (t - 1.0) * (t - 2.0) / 6.0};
    for (std::uint32_t n = 0; n < 4; ++n)
        mixed.kind[n] = stake.grade * static_cast<std::uint32_t>(nodes_.size()) + left + n;
    return mixed;
}

Form form_of(Settings const& settings) {
    if (settings.loss == LossKind::revaluation) return Form::revaluation;
    return settings.loss_given_default_deviation > 0.0 ? Form::beta : Form::fixed;
}

std::size_t terms_of(Form form) {
    return form == Form::fixed ? 3 : form == Form::beta ? 6 : terms_max;
}

std::array<double, terms_max> amounts(Form form, Stake const& stake) {
    auto const [w1, w2, w3] = stake.on_default;
    double const e = stake.exposure;
    switch (form) {
        case Form::fixed:
            return {w1, w2, w3};
        case Form::beta:
            return {w1, w2, w1 * w1, w3, w1 * w2, w1 * w1 * w1};
        default:
            return {e,          w1,          e * e,  e * w1,       w1 * w1, w2, e * e * e,
                    e * e * w1, e * w1 * w1, e * w2, w1 * w1 * w1, w1 * w2, w3};
    }
}

}  // namespace model
