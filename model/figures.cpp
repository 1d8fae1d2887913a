#include "model/figures.hpp"

#include <Eigen/Core>

#include <algorithm>
#include <cmath>

namespace model {

NameFigures closed_form(Name const& name, Settings const& settings, Migration const& migration) {
    NameFigures figures;
    figures.default_probability = migration.default_probability(name.grade);
    figures.downgrade_probability = migration.downgrade_probability(name.grade);
    double const exposure = name.exposure_at_default.units();
    double const lost = name.loss_at_default;
    if (name.grade == settings.grades.in_default()) {
        figures.expected_loss = lost;
        return figures;
    }

    double const pd = figures.default_probability.value();
    double recovery_variance = 0.0;
    if (double const d = settings.loss_given_default_deviation; d > 0.0 && exposure > 0.0) {
        double const m = std::clamp(lost / exposure, 0.0, 1.0);
        double const m0 = settings.loss_given_default.value();
        recovery_variance = exposure * exposure * m * (1.0 - m) * d * d / (m0 * (1.0 - m0));
    }
    if (settings.loss == LossKind::default_only) {
        figures.expected_loss = pd * lost;
        figures.standalone_loss_deviation =
            std::sqrt(pd * (1.0 - pd) * lost * lost + pd * recovery_variance);
        return figures;
    }

    auto const grades = settings.grade_values.cols();
    Eigen::ArrayXd const probability = migration.matrix().row(name.grade.rank);
    Eigen::ArrayXd loss(grades + 1);
    loss.head(grades) = exposure * settings.grade_values.row(name.grade.rank).transpose().array();
    loss[grades] = lost;
    figures.expected_loss = (probability * loss).sum();
    figures.standalone_loss_deviation = std::sqrt(
        (probability * (loss - figures.expected_loss).square()).sum() + pd * recovery_variance);
    return figures;
}

}  // namespace model
