// How many scenarios a second the judge does, beside the loop a textbook would write: the same
// book, the same run.

#include "model/dependence.hpp"
#include "model/migration.hpp"
#include "model/simulation.hpp"
#include "tests/support/model_book.hpp"

#include <Eigen/Core>
#include <fmt/format.h>

#include <algorithm>
#include <chrono>
#include <random>
#include <set>
#include <thread>
#include <tuple>

namespace {

double seconds(auto&& work) {
    auto const begin = std::chrono::steady_clock::now();
    work();
    return std::chrono::duration<double>(std::chrono::steady_clock::now() - begin).count();
}

// X = loading Z + sqrt(1 - rho) e for each name, against its default threshold.
class Textbook {
public:
    Textbook(tests::Names const& names, model::Settings const& settings) {
        model::Migration const migration{settings};
        auto const factor = model::factor(settings.indices.correlation);
        auto const size = static_cast<Eigen::Index>(names.size());
        loading_.resize(size, factor.cols());
        own_.resize(size);
        threshold_.resize(size);
        loss_.resize(size);
        for (Eigen::Index i = 0; i < size; ++i) {
            model::Name const& name = *names[static_cast<std::size_t>(i)];
            auto const blend = model::blend(settings, name.sector, name.country);
            double const rho = settings.asset_correlation[name.grade.rank];
            loading_.row(i) = std::sqrt(rho) * (blend.first_weight * factor.row(blend.first) +
                                                blend.second_weight * factor.row(blend.second));
            own_[i] = std::sqrt(1.0 - rho);
            threshold_[i] = migration.thresholds(name.grade).front();
            loss_[i] = name.loss_at_default;
        }
    }

    double losses(std::size_t scenarios) {
        std::mt19937 bits{1};
        std::normal_distribution<double> normal;
        Eigen::VectorXd factors(loading_.cols());
        Eigen::ArrayXd own(loading_.rows());
        double sum = 0.0;
        for (std::size_t s = 0; s < scenarios; ++s) {
            for (double& z : factors) z = normal(bits);
            for (double& e : own) e = normal(bits);
            Eigen::ArrayXd const returns = (loading_ * factors).array() + own_ * own;
            sum += (returns < threshold_).select(loss_, 0.0).sum();
        }
        return sum / static_cast<double>(scenarios);
    }

private:
    Eigen::MatrixXd loading_;
    Eigen::ArrayXd own_;
    Eigen::ArrayXd threshold_;
    Eigen::ArrayXd loss_;
};

}  // namespace

int main() {
    auto const settings = tests::lender_settings();
    auto const names = tests::lender(1'500);
    model::Migration const migration{settings};
    model::Simulation const judge{names, settings, migration};
    std::set<std::tuple<int, std::string, std::string>> cells;
    for (auto const& name : names) cells.emplace(name->grade.rank, name->sector, name->country);

    Textbook textbook{names, settings};
    constexpr std::size_t textbook_scenarios = 20'000;
    double textbook_mean = 0.0;
    double const textbook_rate =
        textbook_scenarios / seconds([&] { textbook_mean = textbook.losses(textbook_scenarios); });

    fmt::print(
        "{} names in {} cells, default_only; a mean loss, as a check that both do the same\n\n",
        names.size(), cells.size());
    fmt::print("{:<10} {:>7} {:>12} {:>12} {:>8} {:>12}\n", "", "threads", "scenarios", "a second",
               "ratio", "mean loss");
    fmt::print("{:<10} {:>7} {:>12} {:>12.0f} {:>8.1f} {:>12.0f}\n", "textbook", 1,
               textbook_scenarios, textbook_rate, 1.0, textbook_mean);
    std::set<unsigned> const threads{1U, std::max(1U, std::thread::hardware_concurrency())};
    for (unsigned const count : threads) {
        constexpr std::size_t scenarios = 1'000'000;
        double mean = 0.0;
        double const rate = scenarios / seconds([&] {
                                for (double const loss : judge.losses(0, scenarios, count))
                                    mean += loss / scenarios;
                            });
        fmt::print("{:<10} {:>7} {:>12} {:>12.0f} {:>8.1f} {:>12.0f}\n", "judge", count, scenarios,
                   rate, rate / textbook_rate, mean);
    }
}
