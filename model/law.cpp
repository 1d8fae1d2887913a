#include "model/law.hpp"

#include <algorithm>
#include <cmath>
#include <numbers>
#include <utility>

namespace model {
namespace {

constexpr double steps_per_unit_min = 64.0;
constexpr double steps_per_unit_max = 512.0;
constexpr std::size_t table_max = std::size_t{1} << 22;  // Lanes: 128 MiB

struct ValueAndSlope {
    double value = 0.0;
    double slope = 0.0;
};

ValueAndSlope below(double cut, double asset_correlation, double index) {
    if (std::isinf(cut)) return {cut > 0.0 ? 1.0 : 0.0, 0.0};
    double const own = std::sqrt(1.0 - asset_correlation);
    double const x = (cut - std::sqrt(asset_correlation) * index) / own;
    double const density = std::exp(-0.5 * x * x) / std::sqrt(2.0 * std::numbers::pi);
    return {normal_below(x), -std::sqrt(asset_correlation) / own * density};
}

}  // namespace

Law::Law(Cells const& cells, Of of) {
    auto const& kinds = cells.kinds();
    auto const& settings = cells.settings();
    std::size_t const grades = settings.grades.size();
    bool const revaluation = settings.loss == LossKind::revaluation;
    functions_ = !revaluation ? 1 : of == Of::states ? grades + 1 : 4;
    groups_ = in_lanes(kinds.size());
    row_size_ = functions_ * groups_ * 4;

    double steepest = 1.0;
    for (auto const& [grade, rho] : kinds)
        steepest = std::max(steepest, std::sqrt(rho / (1.0 - rho)));
    per_unit_ = steps_per_unit_min;
    auto const rows = [&] { return static_cast<std::size_t>(2.0 * index_max * per_unit_); };
    while (per_unit_ < steps_per_unit_min * steepest && per_unit_ < steps_per_unit_max &&
           2 * rows() * row_size_ <= table_max)
        per_unit_ *= 2.0;
    last_step_ = std::nextafter(static_cast<double>(rows()), 0.0);
    table_.clear_to(rows() * row_size_);

    // Values and slopes of a kind's functions at an index.
    std::vector<ValueAndSlope> values(functions_);
    auto const evaluate = [&](Kind const& kind, double index) {
        auto const& cuts = cells.migration().thresholds(Grade{kind.grade});  // worst state first
        std::ranges::fill(values, ValueAndSlope{});
        ValueAndSlope worse;
        for (std::size_t state = grades + 1; state-- > 0;) {
            if (!revaluation && state < grades) break;
            auto const upto = state > 0 ? below(cuts[grades - state], kind.asset_correlation, index)
                                        : ValueAndSlope{1.0, 0.0};
            ValueAndSlope const here{upto.value - worse.value, upto.slope - worse.slope};
            worse = upto;
            if (of == Of::states || !revaluation) {
                values[revaluation ? state : 0] = here;
            } else if (state == grades) {
                values[0] = here;
            } else {
                auto const row = settings.grade_values.row(kind.grade);
                double const d = row[static_cast<Eigen::Index>(state)] - row[kind.grade];
                for (std::size_t r = 1; r <= 3; ++r) {
                    double const power = std::pow(d, static_cast<double>(r));
                    values[r].value += here.value * power;
                    values[r].slope += here.slope * power;
                }
            }
        }
    };

    double const step = 1.0 / per_unit_;
    std::vector<ValueAndSlope> left(functions_);
    for (std::size_t k = 0; k < kinds.size(); ++k) {
        evaluate(kinds[k], -index_max);
        for (std::size_t row = 0; row < rows(); ++row) {
            left = values;
            evaluate(kinds[k], -index_max + static_cast<double>(row + 1) * step);
            for (std::size_t f = 0; f < functions_; ++f) {
                double const rise = values[f].value - left[f].value;
                double const from = step * left[f].slope;
                double const to = step * values[f].slope;
                Lanes* const c = &table_[row * row_size_ + (f * groups_ + k / lane_count) * 4];
                c[0][k % lane_count] = left[f].value;
                c[1][k % lane_count] = from;
                c[2][k % lane_count] = 3.0 * rise - 2.0 * from - to;
                c[3][k % lane_count] = from + to - 2.0 * rise;
            }
        }
    }
}

}  // namespace model
