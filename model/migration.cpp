#include "model/migration.hpp"

#include <boost/math/distributions/normal.hpp>

#include <algorithm>
#include <limits>

namespace model {
namespace {

// A row of probabilities that sums to 1: cumulated from default upwards, never past 1, and the best
// grade takes what is left.
void settle(Eigen::MatrixXd& matrix, Eigen::Index row) {
    double left = 1.0;
    for (Eigen::Index state = matrix.cols() - 1; state > 0; --state) {
        matrix(row, state) = std::min(matrix(row, state), left);
        left -= matrix(row, state);
    }
    matrix(row, 0) = left;
}

// Phi^-1 of the mass below a cut, from whichever side of it is the smaller.
double cut(double mass_below, double mass_above) {
    constexpr double infinity = std::numeric_limits<double>::infinity();
    if (mass_below <= 0.0) return -infinity;
    if (mass_above <= 0.0) return infinity;
    boost::math::normal const normal;
    return mass_below < mass_above
               ? boost::math::quantile(normal, mass_below)
               : boost::math::quantile(boost::math::complement(normal, mass_above));
}

}  // namespace

Migration::Migration(Settings const& settings) {
    auto const grades = static_cast<Eigen::Index>(settings.grades.size());
    Eigen::MatrixXd one_year = Eigen::MatrixXd::Zero(grades + 1, grades + 1);
    one_year.topRows(grades) = settings.transition;
    one_year(grades, grades) = 1.0;
    for (Eigen::Index from = 0; from < grades; ++from) settle(one_year, from);

    Eigen::MatrixXd horizon = one_year;
    for (int year = 1; year < settings.horizon_years; ++year) horizon = horizon * one_year;
    matrix_ = horizon.topRows(grades);

    for (Eigen::Index from = 0; from < grades; ++from) {
        if (settings.horizon_years > 1) settle(matrix_, from);
        auto const row = matrix_.row(from);
        std::vector<double> cuts;
        for (Eigen::Index state = grades; state > 0; --state)
            cuts.push_back(cut(row.tail(grades + 1 - state).sum(), row.head(state).sum()));
        thresholds_.push_back(std::move(cuts));
    }
}

Probability Migration::default_probability(Grade grade) const {
    if (grade.rank >= matrix_.rows()) return *Probability::from_fraction(1.0);
    return *Probability::from_fraction(matrix_(grade.rank, matrix_.cols() - 1));
}

Probability Migration::downgrade_probability(Grade grade) const {
    if (grade.rank >= matrix_.rows()) return {};
    auto const worse = matrix_.cols() - 1 - grade.rank;
    return *Probability::from_fraction(std::min(1.0, matrix_.row(grade.rank).tail(worse).sum()));
}

}  // namespace model
