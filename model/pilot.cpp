#include "model/pilot.hpp"

#include "model/points.hpp"
#include "model/transform.hpp"

#include <Eigen/Eigenvalues>

#include <algorithm>
#include <cmath>
#include <numbers>
#include <numeric>
#include <optional>

namespace model {
namespace {

constexpr std::uint32_t pilot_points = 4096;
constexpr std::uint32_t points_per_scrambling = 1024;
constexpr std::uint32_t scramblings = 16;
constexpr double first_level = 0.02;  // the tail that the first cross-entropy step looks at
constexpr double gain_min = 1.2;      // of effective share, for one more cluster
constexpr std::size_t clusters_max = 6;
constexpr double width_by_decay = 0.3;  // width x rate at which the tail falls
constexpr double large_by_decay = 0.3;  // amount x that rate
constexpr double negligible = 3e-6;     // of the tail
// Points of a part times nodes: what no plan found here exceeds, even on many more points.
constexpr std::uint64_t usable_work_max = 1U << 24U;
constexpr double lattice_units_max = 4096.0;
constexpr double kernel_reach = 8.0;
constexpr double nodes_first_max = 512.0;
constexpr double window_reach = 7.0;  // nodes end where width x t is so much

double density(double x) {
    return std::exp(-0.5 * x * x) / std::sqrt(2.0 * std::numbers::pi);
}

// Scenarios with the loss's conditional mean and deviation.
class Pilot {
public:
    Pilot(Cells const& cells, Law const& law, CellSums const& sums, Plan const& plan,
          unsigned threads) {
        for (auto& part : points(plan, cells.loadings().cols(), threads)) {
            Eigen::MatrixXd const kappa =
                conditional_cumulants(law, cells.blends(), sums, cells.loadings() * part.factors);
            auto const parts = is_sampled(cells.loadings().cols())
                                   ? static_cast<double>(plan.scramblings)
                               : part.factors.size() == 0 ? 1.0
                                                          : static_cast<double>(parts_max);
            for (Eigen::Index s = 0; s < kappa.cols(); ++s) {
                factors_.emplace_back(part.factors.col(s));
                weight_.push_back(part.weight[static_cast<std::size_t>(s)] / parts);
                mean_.push_back(kappa(0, s));
                deviation_.push_back(std::sqrt(std::max(kappa(1, s), 0.0)));
            }
        }
    }

    [[nodiscard]] double beyond(std::size_t s, double x) const {
        if (deviation_[s] <= 0.0) return mean_[s] > x ? 1.0 : 0.0;
        return normal_below((mean_[s] - x) / deviation_[s]);
    }
    [[nodiscard]] double tail(double x) const {
        double sum = 0.0;
        for (std::size_t s = 0; s < weight_.size(); ++s) sum += weight_[s] * beyond(s, x);
        return sum / mass();
    }
    [[nodiscard]] double density_at(double x) const {
        double sum = 0.0;
        for (std::size_t s = 0; s < weight_.size(); ++s)
            if (deviation_[s] > 0.0)
                sum += weight_[s] * density((x - mean_[s]) / deviation_[s]) / deviation_[s];
        return sum / mass();
    }
    // The x with so much beyond it.
    [[nodiscard]] double quantile(double beyond) const {
        double low = 0.0;
        double high = 0.0;
        for (std::size_t s = 0; s < weight_.size(); ++s) {
            low = std::min(low, mean_[s] - 40.0 * deviation_[s]);
            high = std::max(high, mean_[s] + 40.0 * deviation_[s]);
        }
        for (int i = 0; i < 100; ++i) {
            double const middle = 0.5 * (low + high);
            (tail(middle) > beyond ? low : high) = middle;
        }
        return high;
    }
    // By point: its share of the tail beyond x.
    [[nodiscard]] std::vector<double> shares(double x) const {
        std::vector<double> shares;
        for (std::size_t s = 0; s < weight_.size(); ++s)
            shares.push_back(weight_[s] * beyond(s, x));
        double const total = std::accumulate(shares.begin(), shares.end(), 0.0);
        if (total > 0.0)
            for (double& share : shares) share /= total;
        return shares;
    }
    // Of the points of another mixture, how many would count in the tail beyond x.
    [[nodiscard]] double effective_share(Plan const& plan, double x) const {
        double sum = 0.0;
        double squares = 0.0;
        for (std::size_t s = 0; s < weight_.size(); ++s) {
            double const own = beyond(s, x);
            sum += weight_[s] * own;
            squares += weight_[s] * own * own / mixture_density(plan, factors_[s]);
        }
        return squares > 0.0 ? sum * sum / squares : 1.0;
    }
    [[nodiscard]] std::vector<Eigen::VectorXd> const& factors() const { return factors_; }

private:
    [[nodiscard]] double mass() const {
        return std::accumulate(weight_.begin(), weight_.end(), 0.0);
    }

    std::vector<Eigen::VectorXd> factors_;
    std::vector<double> weight_;
    std::vector<double> mean_;
    std::vector<double> deviation_;
};

Eigen::VectorXd rounded(Eigen::VectorXd const& mean) {
    return (mean * 16.0).array().round().matrix() / 16.0;
}

Eigen::VectorXd mean_of(std::vector<Eigen::VectorXd> const& points,
                        std::vector<double> const& shares) {
    Eigen::VectorXd mean = Eigen::VectorXd::Zero(points.front().size());
    double total = 0.0;
    for (std::size_t s = 0; s < points.size(); ++s) {
        mean += shares[s] * points[s];
        total += shares[s];
    }
    return total > 0.0 ? Eigen::VectorXd{mean / total} : mean;
}

// Means of clusters of weighted points: from one to the next number, the widest cluster is split
// along its longest axis, and points go to the nearest mean (Lloyd, 1982, Least squares
// quantization in PCM, IEEE Transactions on Information Theory 28(2)).
std::vector<Eigen::VectorXd> split_once(std::vector<Eigen::VectorXd> const& points,
                                        std::vector<double> const& shares,
                                        std::vector<Eigen::VectorXd> means) {
    auto const nearest = [&](std::size_t s) {
        std::size_t best = 0;
        for (std::size_t c = 1; c < means.size(); ++c)
            if ((points[s] - means[c]).squaredNorm() < (points[s] - means[best]).squaredNorm())
                best = c;
        return best;
    };
    auto const size = points.front().size();
    std::vector<Eigen::MatrixXd> spread(means.size(), Eigen::MatrixXd::Zero(size, size));
    for (std::size_t s = 0; s < points.size(); ++s) {
        if (shares[s] < 1e-12) continue;
        auto const c = nearest(s);
        Eigen::VectorXd const away = points[s] - means[c];
        spread[c] += shares[s] * away * away.transpose();
    }
    std::size_t widest = 0;
    double most = -1.0;
    Eigen::VectorXd axis;
    for (std::size_t c = 0; c < means.size(); ++c) {
        Eigen::SelfAdjointEigenSolver<Eigen::MatrixXd> const solver{spread[c]};
        if (solver.eigenvalues().maxCoeff() <= most) continue;
        most = solver.eigenvalues().maxCoeff();
        widest = c;
        axis = solver.eigenvectors().rightCols(1);
    }
    means.emplace_back(means[widest] + axis);
    means[widest] -= axis;
    for (int round = 0; round < 10; ++round) {
        std::vector<Eigen::VectorXd> sums(means.size(), Eigen::VectorXd::Zero(size));
        std::vector<double> totals(means.size(), 0.0);
        for (std::size_t s = 0; s < points.size(); ++s) {
            if (shares[s] < 1e-12) continue;
            auto const c = nearest(s);
            sums[c] += shares[s] * points[s];
            totals[c] += shares[s];
        }
        for (std::size_t c = 0; c < means.size(); ++c)
            if (totals[c] > 0.0) means[c] = sums[c] / totals[c];
    }
    return means;
}

// Shares in eighths: one defensive at 0; one beside the tail's mean, the rest to the clusters.
std::vector<Component> mixture(std::vector<Eigen::VectorXd> const& means,
                               Eigen::VectorXd const& mean, std::uint32_t points) {
    std::uint32_t const eighth = points / 8;
    std::vector<Component> mixture;
    std::uint32_t left = 6;
    for (std::size_t c = 0; c < means.size(); ++c) {
        auto const share = (left + static_cast<std::uint32_t>(means.size() - c) - 1) /
                           static_cast<std::uint32_t>(means.size() - c);
        mixture.push_back({rounded(means[c]), share * eighth});
        left -= share;
    }
    mixture.push_back({rounded(means.size() == 1 ? Eigen::VectorXd{0.7 * mean} : mean), eighth});
    mixture.push_back({Eigen::VectorXd::Zero(mean.size()), eighth});
    return mixture;
}

}  // namespace

Plan find_plan(Cells const& cells, std::span<Stake const> stakes, std::uint64_t seed,
               unsigned threads) {
    auto const factors = cells.loadings().cols();
    double const beyond = 1.0 - cells.settings().confidence;
    Law const law{cells, Law::Of::moments};
    CellSums sums{cells, law};
    for (auto const& stake : stakes)
        if (stake.takes_part) sums.add(cells, stake, 1.0);

    Plan plan;
    plan.seed = seed;
    plan.scramblings = 1;
    Eigen::VectorXd const zero = Eigen::VectorXd::Zero(factors);
    plan.mixture = {{zero, pilot_points}};
    double quantile = 0.0;
    std::optional<Pilot> pilot;
    for (double const level : {std::max(first_level, beyond), beyond, beyond}) {
        pilot.emplace(cells, law, sums, plan, threads);
        quantile = pilot->quantile(level);
        if (factors == 0) break;
        auto const mean = mean_of(pilot->factors(), pilot->shares(quantile));
        plan.mixture = mixture({mean}, mean, pilot_points);
    }
    pilot.emplace(cells, law, sums, plan, threads);
    quantile = pilot->quantile(beyond);
    double const rate = pilot->density_at(quantile) / beyond;
    auto const shares = pilot->shares(quantile);

    plan.scramblings = scramblings;
    if (factors > 0) {
        auto const mean = mean_of(pilot->factors(), shares);
        std::vector<Eigen::VectorXd> means{mean};
        plan.mixture = mixture(means, mean, points_per_scrambling);
        plan.effective_share = pilot->effective_share(plan, quantile);
        while (is_sampled(factors) && means.size() < clusters_max) {
            means = split_once(pilot->factors(), shares, std::move(means));
            Plan other = plan;
            other.mixture = mixture(means, mean, points_per_scrambling);
            other.effective_share = pilot->effective_share(other, quantile);
            if (other.effective_share < gain_min * plan.effective_share) break;
            plan = std::move(other);
        }
    }

    // A tail of few names is not normal: three of the largest are allowed for.
    double total = 0.0;
    double largest = 0.0;
    for (auto const& stake : stakes) {
        total += stake.largest;
        largest = std::max(largest, stake.largest);
    }
    double const highest =
        std::min(std::max(pilot->quantile(negligible * beyond), quantile + 3.0 * largest), total);
    plan.lowest = std::min(pilot->quantile(1.0 - 1e-9), 0.0);
    plan.width = rate > 0.0 ? width_by_decay / rate : 1.0;
    // The window's kernel reaches eight widths: what it makes of the body must not reach the
    // quantile.
    double const clear = std::abs(quantile) > 0.0 ? std::abs(quantile) : highest - plan.lowest;
    plan.width = std::min(plan.width, clear / kernel_reach);
    plan.period = highest - plan.lowest + kernel_reach * plan.width;
    plan.damping = 1.0 / plan.period;
    auto const nodes = [&] {
        return std::ceil(window_reach / plan.width * plan.period / (2.0 * std::numbers::pi));
    };
    if (nodes() > nodes_first_max) plan.width *= nodes() / nodes_first_max;
    plan.nodes = static_cast<std::uint32_t>(nodes());

    plan.large_from = rate > 0.0 ? large_by_decay / rate : 0.0;
    return plan;
}

bool is_usable(Plan const& plan, Cells const& cells) {
    auto const factors = cells.loadings().cols();
    bool const lattice = plan.inversion == Inversion::lattice;
    auto const positive = [](double x) { return x > 0.0 && std::isfinite(x); };
    std::uint64_t points = 0;
    for (auto const& component : plan.mixture) {
        if (component.mean.size() != factors || !component.mean.allFinite()) return false;
        points += component.points;
    }
    return plan.scramblings == scramblings && !plan.mixture.empty() && points >= parts_max &&
           points % parts_max == 0 && points * plan.nodes <= usable_work_max && plan.nodes >= 2 &&
           positive(plan.period) && positive(plan.damping) && std::isfinite(plan.lowest) &&
           positive(lattice ? plan.unit : plan.width) && plan.large_from >= 0.0;
}

bool is_on_lattice(Plan const& plan, std::span<Stake const> stakes) {
    return std::ranges::all_of(stakes, [&](Stake const& stake) {
        double const units = stake.on_default[0] / plan.unit;
        return !stake.takes_part || std::abs(units - std::nearbyint(units)) < 1e-6;
    });
}

std::optional<Plan> on_lattice(Plan plan, Settings const& settings, std::span<Stake const> stakes) {
    if (form_of(settings) != Form::fixed) return std::nullopt;
    std::int64_t common = 0;  // thousandths
    double total = 0.0;
    for (auto const& stake : stakes) {
        if (!stake.takes_part) continue;
        total += stake.largest;
        double const thousandths = stake.on_default[0] * 1000.0;
        if (std::abs(thousandths - std::nearbyint(thousandths)) > 1e-6 || thousandths > 9e15)
            return std::nullopt;
        common = std::gcd(common, static_cast<std::int64_t>(std::nearbyint(thousandths)));
    }
    plan.unit = static_cast<double>(common) / 1000.0;
    double const units = std::min(plan.lowest + plan.period, total) / plan.unit;
    if (units > lattice_units_max) return std::nullopt;
    plan.inversion = Inversion::lattice;
    plan.width = 0.0;
    plan.large_from = 0.0;
    plan.lowest = 0.0;
    plan.nodes = static_cast<std::uint32_t>(std::ceil(units / 2.0)) + 3;
    plan.period = 2.0 * (plan.nodes - 1) * plan.unit;
    plan.damping = 1.0 / plan.period;
    return plan;
}

}  // namespace model
