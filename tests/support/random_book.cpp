#include "tests/support/random_book.hpp"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>
#include <random>

namespace tests {
namespace {

class Chance {
public:
    explicit Chance(std::uint64_t seed) : bits_{seed} {}

    double uniform(double low = 0.0, double high = 1.0) {
        return low + (high - low) * std::ldexp(static_cast<double>(bits_() >> 11U), -53);
    }
    double log_uniform(double low, double high) { return low * std::pow(high / low, uniform()); }
    std::size_t below(std::size_t count) { return bits_() % count; }
    bool with(double probability) { return uniform() < probability; }

private:
    std::mt19937_64 bits_;
};

void add_grades(model::Settings& settings, Chance& chance) {
    auto const grades = static_cast<Eigen::Index>(2 + chance.below(9));
    std::vector<double> defaults;
    for (Eigen::Index g = 0; g < grades; ++g)
        defaults.push_back(chance.with(0.1) ? 0.0 : chance.log_uniform(1e-5, 0.3));
    std::ranges::sort(defaults);

    std::vector<std::string> names;
    settings.transition = Eigen::MatrixXd::Zero(grades, grades + 1);
    for (Eigen::Index from = 0; from < grades; ++from) {
        names.push_back(fmt::format("G{}", from + 1));
        double const moves = chance.uniform(0.0, 0.3);
        double const decay = chance.uniform(0.1, 0.6);
        auto row = settings.transition.row(from);
        for (Eigen::Index to = 0; to < grades; ++to)
            if (to != from) row[to] = moves * std::pow(decay, std::abs(to - from));
        row[grades] = defaults[static_cast<std::size_t>(from)];
        row[from] = 1.0 - row.sum();
        settings.asset_correlation.push_back(chance.log_uniform(0.01, 0.8));
    }
    settings.grades = model::GradeScale{names};
}

// Worse grades lose, better ones gain, the more the further; staying may have a value too.
void add_grade_values(model::Settings& settings, Chance& chance) {
    auto const grades = settings.transition.rows();
    settings.loss = model::LossKind::revaluation;
    settings.grade_values.resize(grades, grades);
    double const stays = chance.with(0.5) ? 0.0 : chance.uniform(-0.03, 0.01);
    double const loses = chance.uniform(0.001, 0.03);
    double const gains = chance.uniform(0.001, 0.01);
    for (Eigen::Index from = 0; from < grades; ++from)
        for (Eigen::Index to = 0; to < grades; ++to) {
            auto const steps = static_cast<double>(to - from);
            settings.grade_values(from, to) =
                stays + (steps > 0.0 ? loses * std::pow(steps, 1.3) : gains * steps);
        }
}

// Sectors, and countries in most books, with `others` of each kind: correlated by up to three
// common sources, of which the first moves all the same way.
void add_indices(model::Settings& settings, Chance& chance) {
    auto const count = static_cast<std::size_t>(chance.log_uniform(1.0, 31.0));
    auto& [names, correlation] = settings.indices;
    names.clear();
    if (count == 1) {
        names.emplace_back("all");
        settings.index_weights = {.all = 1.0};
    } else {
        std::size_t const countries = count >= 4 && chance.with(0.7) ? count / 3 : 0;
        for (std::size_t i = 1; i < count - countries; ++i)
            names.push_back(fmt::format("sector:S{}", i));
        names.emplace_back("sector:others");
        for (std::size_t i = 1; i < countries; ++i) names.push_back(fmt::format("country:C{}", i));
        if (countries > 0) names.emplace_back("country:others");
        double const country = countries > 0 ? chance.uniform(0.1, 0.9) : 0.0;
        settings.index_weights = {.sector = 1.0 - country, .country = country};
    }
    auto const size = static_cast<Eigen::Index>(count);
    auto const sources = static_cast<Eigen::Index>(1 + chance.below(3));
    Eigen::MatrixXd sensitivity(size, sources);
    for (Eigen::Index i = 0; i < size; ++i) {
        for (Eigen::Index s = 0; s < sources; ++s)
            sensitivity(i, s) = s == 0 ? chance.uniform(0.1, 1.0) : chance.uniform(-0.5, 0.5);
        double const common = chance.uniform(0.0, 0.9);  // share of the index's variance
        sensitivity.row(i) *= std::sqrt(common) / sensitivity.row(i).norm();
    }
    correlation = sensitivity * sensitivity.transpose();
    correlation.diagonal().setOnes();
}

}  // namespace

RandomBook random_book(std::uint64_t seed) {
    Chance chance{seed};
    RandomBook book;
    auto& settings = book.settings;
    settings.base_currency = "EUR";
    settings.confidence = 1.0 - chance.log_uniform(1e-4, 0.05);
    add_grades(settings, chance);
    add_indices(settings, chance);
    bool const revaluation = chance.with(0.4);
    if (revaluation) add_grade_values(settings, chance);
    double const mean = chance.uniform(0.2, 0.7);
    settings.loss_given_default = *model::Fraction::from_fraction(mean);
    bool const beta = chance.with(0.4);
    if (beta)
        settings.loss_given_default_deviation =
            chance.uniform(0.05, 0.9) * std::sqrt(mean * (1.0 - mean));

    auto const count = static_cast<std::size_t>(chance.log_uniform(1.0, 5'001.0));
    double const shape = chance.uniform(0.8, 3.0);
    bool const lots = chance.with(0.25);
    double const own_correlations = chance.with(0.3) ? chance.uniform(0.02, 0.5) : 0.0;
    bool const one_recovery = chance.with(0.5);
    std::size_t const grades = settings.grades.size();
    auto const indices = settings.indices.names.size();
    std::size_t zero = 0;
    std::size_t in_default = 0;
    double largest = 0.0;
    double whole = 0.0;
    for (std::size_t i = 0; i < count; ++i) {
        model::Name name;
        name.counterparty_id = fmt::format("C{:05}", i);
        name.sector = fmt::format("S{}", 1 + chance.below(indices + 1));  // some have no index
        name.country = fmt::format("C{}", 1 + chance.below(indices + 1));
        name.grade = {static_cast<std::uint8_t>(
            chance.with(0.02) ? grades : std::min(chance.below(grades), chance.below(grades + 2)))};
        double exposure = 1e5 * std::min(std::pow(1.0 - chance.uniform(), -1.0 / shape), 1e5);
        if (lots) exposure = 1e5 * std::round(exposure / 1e5);
        if (chance.with(0.03)) exposure = 0.0;
        name.exposure_at_default = *model::Money::from_units(exposure);
        exposure = name.exposure_at_default.units();
        name.loss_at_default = exposure * (one_recovery ? mean : chance.uniform());
        if (chance.with(own_correlations)) name.asset_correlation = chance.uniform(0.01, 0.8);
        zero += exposure == 0.0 ? 1 : 0;
        in_default += name.grade == settings.grades.in_default() ? 1 : 0;
        largest = std::max(largest, exposure);
        whole += exposure;
        book.names.push_back(std::make_shared<model::Name const>(std::move(name)));
    }

    auto const [least, most] = std::ranges::minmax(settings.asset_correlation);
    auto const defaults = settings.transition.col(settings.transition.cols() - 1);
    book.describe = fmt::format(
        "seed {}: {} names ({} zero, {} in default), largest {:.1f}% of exposure{}, {} grades, "
        "default probability {:.2g} to {:.2g}, correlation {:.2f} to {:.2f}{}, {} indices, {}, {} "
        "recoveries, confidence {:.5f}",
        seed, count, zero, in_default, whole > 0.0 ? 100.0 * largest / whole : 0.0,
        lots ? " in lots" : "", grades, defaults.minCoeff(), defaults.maxCoeff(), least, most,
        own_correlations > 0.0 ? " and some names' own" : "", indices,
        revaluation ? "revaluation" : "default_only", beta ? "beta" : "fixed", settings.confidence);
    return book;
}

}  // namespace tests
