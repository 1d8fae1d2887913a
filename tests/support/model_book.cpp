#include "tests/support/model_book.hpp"

#include <fmt/format.h>

#include <array>
#include <cmath>
#include <random>

namespace tests {
namespace {

constexpr std::array sectors{"AGRI",  "CONSTR",  "ENERGY", "FINANCE", "HEALTH",
                             "MANUF", "REALEST", "RETAIL", "TRANSP"};
constexpr std::array countries{"AT", "CH", "CZ", "DE", "FR", "IT", "NL", "PL"};

}  // namespace

model::Settings one_index(std::vector<double> const& default_probabilities,
                          double asset_correlation) {
    auto const grades = static_cast<Eigen::Index>(default_probabilities.size());
    model::Settings settings;
    settings.base_currency = "EUR";
    std::vector<std::string> grade_names;
    settings.transition = Eigen::MatrixXd::Zero(grades, grades + 1);
    for (Eigen::Index g = 0; g < grades; ++g) {
        grade_names.push_back(fmt::format("G{}", g + 1));
        double const p = default_probabilities[static_cast<std::size_t>(g)];
        settings.transition(g, g) = 1.0 - p;
        settings.transition(g, grades) = p;
    }
    settings.grades = model::GradeScale{grade_names};
    settings.loss_given_default = *model::Fraction::from_fraction(0.45);
    settings.indices = {.names = {"all"}, .correlation = Eigen::MatrixXd::Identity(1, 1)};
    settings.index_weights = {.all = 1.0};
    settings.asset_correlation.assign(default_probabilities.size(), asset_correlation);
    settings.simulation = {.scenarios = 20'000, .seed = 1};
    return settings;
}

model::Settings lender_settings() {
    model::Settings settings = one_index(std::vector<double>(7, 0.0), 0.0);
    settings.transition.resize(7, 8);
    // clang-format off
    settings.transition << 0.9200, 0.0700, 0.0080, 0.0010, 0.0005, 0.0002, 0.0001, 0.0002,
                           0.0100, 0.9100, 0.0700, 0.0070, 0.0015, 0.0006, 0.0004, 0.0005,
                           0.0010, 0.0300, 0.8950, 0.0600, 0.0090, 0.0025, 0.0010, 0.0015,
                           0.0005, 0.0040, 0.0500, 0.8700, 0.0600, 0.0085, 0.0025, 0.0045,
                           0.0002, 0.0010, 0.0060, 0.0700, 0.8400, 0.0580, 0.0100, 0.0148,
                           0.0000, 0.0006, 0.0024, 0.0070, 0.0700, 0.8100, 0.0600, 0.0500,
                           0.0000, 0.0002, 0.0018, 0.0050, 0.0180, 0.0950, 0.7600, 0.1200;
    // clang-format on
    settings.asset_correlation = {0.24, 0.23, 0.22, 0.20, 0.18, 0.16, 0.14};
    settings.index_weights = {.sector = 0.8, .country = 0.2};
    settings.indices.names.clear();
    for (auto const* sector : sectors)
        settings.indices.names.push_back(fmt::format("sector:{}", sector));
    settings.indices.names.emplace_back("sector:others");
    for (auto const* country : countries)
        settings.indices.names.push_back(fmt::format("country:{}", country));
    settings.indices.names.emplace_back("country:others");
    // Sectors lean on one another by 0.4 to 0.7, all else by 0.5.
    auto const size = static_cast<Eigen::Index>(settings.indices.names.size());
    Eigen::VectorXd sensitivity = Eigen::VectorXd::Constant(size, std::sqrt(0.5));
    for (Eigen::Index i = 0; i < 10; ++i)
        sensitivity[i] = std::sqrt(0.4 + 0.03 * static_cast<double>(i));
    settings.indices.correlation = sensitivity * sensitivity.transpose();
    settings.indices.correlation.diagonal().setOnes();
    settings.simulation = {.scenarios = 200'000, .seed = 1};
    return settings;
}

model::Settings revalued_lender_settings() {
    model::Settings settings = lender_settings();
    settings.loss = model::LossKind::revaluation;
    settings.grade_values.resize(7, 7);
    for (int from = 0; from < 7; ++from)
        for (int to = 0; to < 7; ++to) settings.grade_values(from, to) = 0.01 * (to - from) - 0.002;
    return settings;
}

Names lender(std::size_t counterparties) {
    // Grades in the middle are the commonest; a name's facts are independent of one another.
    constexpr std::array grades{0, 1, 1, 2, 2, 2, 3, 3, 3, 3, 4, 4, 4, 5, 5, 6};
    std::mt19937 bits{1};
    Names names;
    for (std::size_t i = 0; i < counterparties; ++i) {
        model::Name name;
        name.counterparty_id = fmt::format("C{:07}", i);
        name.grade = {static_cast<std::uint8_t>(grades[bits() % grades.size()])};
        name.sector = sectors[bits() % sectors.size()];
        name.country = countries[bits() % countries.size()];
        // Exposures fall like a power of the rank: the largest name is about 1% of the whole.
        auto const rank = static_cast<double>(i);
        name.exposure_at_default =
            *model::Money::from_units(std::round(60e6 / std::pow(1.0 + rank / 20.0, 1.1)));
        name.loss_at_default = 0.45 * name.exposure_at_default.units();
        names.push_back(std::make_shared<model::Name const>(std::move(name)));
    }
    return names;
}

std::shared_ptr<model::Name const> name(int rank, double exposure, double loss) {
    model::Name name;
    name.grade = {static_cast<std::uint8_t>(rank)};
    name.exposure_at_default = *model::Money::from_units(exposure);
    name.loss_at_default = loss;
    return std::make_shared<model::Name const>(std::move(name));
}

}  // namespace tests
