#include "model/inversion.hpp"

#include <boost/math/tools/toms748_solve.hpp>

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <numbers>
#include <numeric>
#include <utility>

namespace model {
namespace {

// A probability is taken to be reached where rounding may have kept it from it.
constexpr double rounding = 1e-9;
// Where a window's kernel is as good as gone, in widths.
constexpr double kernel_reach = 8.0;
constexpr std::uintmax_t steps_max = 100;

Complex window(Complex z, double width) {
    Complex const y = 0.5 * width * width * z * z;
    return std::exp(y) * (1.0 - y + 0.5 * y * y);
}

double real_dot(std::vector<Complex> const& weights, std::vector<Complex> const& transform) {
    double sum = 0.0;
    for (std::size_t k = 0; k < weights.size(); ++k)
        sum += weights[k].real() * transform[k].real() - weights[k].imag() * transform[k].imag();
    return sum;
}

}  // namespace

double error_of_mean(std::vector<double> const& parts) {
    auto const count = static_cast<double>(parts.size());
    double const mean = std::accumulate(parts.begin(), parts.end(), 0.0) / count;
    double squares = 0.0;
    for (double const part : parts) squares += (part - mean) * (part - mean);
    return std::sqrt(squares / (count * (count - 1.0)));
}

Contour::Contour(Plan const& plan)
    : step_{2.0 * std::numbers::pi / plan.period},
      width_{plan.width},
      period_{plan.period},
      lattice_{plan.inversion == Inversion::lattice} {
    double const ratio = std::exp(-plan.damping * plan.period);
    image_ = ratio / (1.0 - ratio);
    distant_image_ = ratio / ((1.0 - ratio) * (1.0 - ratio));
    for (std::uint32_t k = 0; k < plan.nodes; ++k) {
        Complex const z{plan.damping, k * step_};
        nodes_.push_back(z);
        above_.push_back(lattice_ ? plan.unit / (std::exp(z * plan.unit) - 1.0) : 1.0 / z);
        from_.push_back(lattice_ ? plan.unit / (1.0 - std::exp(-z * plan.unit)) : 1.0 / z);
    }
}

std::vector<Complex> Contour::density(double x, double wider) const {
    std::vector<Complex> weights(nodes_.size());
    for (std::size_t k = 0; k < nodes_.size(); ++k) {
        bool const end = k == 0 || (lattice_ && k + 1 == nodes_.size());
        double const share = step_ / std::numbers::pi * (end ? 0.5 : 1.0);
        weights[k] = share * std::exp(-nodes_[k] * x);
        if (!lattice_) weights[k] *= window(nodes_[k], wider * width_);
    }
    return weights;
}

std::vector<Complex> Contour::tail(double x, double wider) const {
    auto weights = density(x, wider);
    for (std::size_t k = 0; k < nodes_.size(); ++k) weights[k] *= above_[k];
    return weights;
}

std::vector<Complex> Contour::excess(double x, double wider) const {
    auto weights = tail(x, wider);
    for (std::size_t k = 0; k < nodes_.size(); ++k) weights[k] *= from_[k];
    return weights;
}

LossCurve::LossCurve(Contour contour, Plan const& plan, double base, bool sampled,
                     std::vector<std::vector<Complex>> transforms, std::vector<double> mass,
                     std::vector<double> mean)
    : contour_{std::move(contour)},
      base_{base},
      lowest_{base + plan.lowest},
      highest_{base + plan.lowest + plan.period - kernel_reach * plan.width},
      unit_{plan.unit},
      width_{plan.width},
      sampled_{sampled},
      transforms_{std::move(transforms)},
      mass_{std::move(mass)},
      mean_{std::move(mean)},
      pooled_(contour_.nodes().size()) {
    auto const parts = static_cast<double>(transforms_.size());
    for (auto const& transform : transforms_)
        for (std::size_t k = 0; k < pooled_.size(); ++k) pooled_[k] += transform[k] / parts;
    pooled_mass_ = std::accumulate(mass_.begin(), mass_.end(), 0.0) / parts;
    pooled_mean_ = std::accumulate(mean_.begin(), mean_.end(), 0.0) / parts;
}

double LossCurve::density(double x) const {
    return real_dot(contour_.density(x - base_), pooled_);
}

double LossCurve::tail(double x, double wider) const {
    return real_dot(contour_.tail(x - base_, wider), pooled_) -
           contour_.tail_image() * pooled_mass_;
}

double LossCurve::excess(double x, double wider) const {
    return real_dot(contour_.excess(x - base_, wider), pooled_) -
           contour_.excess_image(x - base_, pooled_mass_, pooled_mean_);
}

std::vector<double> LossCurve::functional(std::vector<Complex> const& weights) const {
    std::vector<double> values;
    for (auto const& transform : transforms_) values.push_back(real_dot(weights, transform));
    return values;
}

std::vector<double> LossCurve::tails(double x) const {
    auto const weights = contour_.tail(x - base_);
    std::vector<double> tails;
    for (std::size_t p = 0; p < transforms_.size(); ++p)
        tails.push_back(real_dot(weights, transforms_[p]) - contour_.tail_image() * mass_[p]);
    return tails;
}

std::vector<double> LossCurve::excesses(double x) const {
    auto const weights = contour_.excess(x - base_);
    std::vector<double> excesses;
    for (std::size_t p = 0; p < transforms_.size(); ++p)
        excesses.push_back(real_dot(weights, transforms_[p]) -
                           contour_.excess_image(x - base_, mass_[p], mean_[p]));
    return excesses;
}

double LossCurve::quantile(double confidence, double wider) const {
    double const beyond = (1.0 - confidence) * (1.0 + rounding);
    if (unit_ > 0.0) {
        // The smallest multiple of the unit with no more than that above it.
        double below = std::floor((lowest_ - base_) / unit_) - 1.0;
        double above = std::ceil((highest_ - base_) / unit_);
        while (above - below > 1.5) {
            double const middle = std::floor(0.5 * (below + above));
            (tail(base_ + middle * unit_) <= beyond ? above : below) = middle;
        }
        return base_ + above * unit_;
    }
    auto const over = [&](double x) { return tail(x, wider) - beyond; };
    double const at_lowest = over(lowest_);
    double const at_highest = over(highest_);
    if (at_lowest <= 0.0) return lowest_;
    if (at_highest >= 0.0) return highest_;
    std::uintmax_t steps = steps_max;
    auto const [below, above] =
        boost::math::tools::toms748_solve(over, lowest_, highest_, at_lowest, at_highest,
                                          boost::math::tools::eps_tolerance<double>{}, steps);
    return above;
}

double LossCurve::expected_shortfall(double confidence) const {
    double const q = quantile(confidence);
    return q + excess(q) / (1.0 - confidence);
}

double LossCurve::image_bound() const {
    double const below = lowest_ - (unit_ > 0.0 ? unit_ : kernel_reach * width_);
    double const x = below - base_;
    double const seen = real_dot(contour_.tail(x), pooled_) - contour_.tail_image() * pooled_mass_;
    return std::abs(seen - pooled_mass_);
}

double LossCurve::tail_error(double x) const {
    double const scrambling = sampled_ ? error_of_mean(tails(x)) : 0.0;
    double const smoothing =
        width_ > 0.0 ? (tail(x, wider_window) - tail(x)) * window_effect(x) : 0.0;
    return std::hypot(scrambling, smoothing, image_bound());
}

double LossCurve::quantile_error(double confidence) const {
    double const q = quantile(confidence);
    double const image = image_bound();
    if (unit_ > 0.0) {
        // Where the loss jumps, one error to the side may show nothing where three do.
        double const error = std::hypot(sampled_ ? error_of_mean(tails(q)) : 0.0, image);
        double widest = 0.0;
        for (double const steps : {1.0, 2.0, 3.0}) {
            double const side = steps * error;
            double const low = quantile(std::max(confidence - side, 0.0));
            double const high = quantile(std::min(confidence + side, 1.0 - 1e-15));
            widest = std::max(widest, (high - low) / (2.0 * steps));
        }
        return widest;
    }
    double const scrambling = sampled_ ? error_of_mean(tails(q)) : 0.0;
    double const density = this->density(q);
    return std::hypot(scrambling / density, image / density, smoothing(confidence));
}

double LossCurve::smoothing(double confidence) const {
    if (width_ == 0.0) return 0.0;
    double const q = quantile(confidence);
    return std::abs(quantile(confidence, wider_window) - q) * window_effect(q);
}

double LossCurve::window_effect(double x) const {
    double const here = tail(x);
    double const wider = tail(x, wider_window);
    double const widest = tail(x, wider_window * wider_window);
    double const growth = std::abs((widest - wider) / (wider - here));
    // Turned this way round, no movement at all counts as an atom's.
    double const first = growth > wider_window ? growth : wider_window;
    return 1.0 / (std::min(first, std::pow(wider_window, 6)) - 1.0);
}

double LossCurve::shortfall_error(double confidence) const {
    double const q = quantile(confidence);
    double const scrambling = sampled_ ? error_of_mean(excesses(q)) : 0.0;
    double const smoothing =
        width_ > 0.0 ? (excess(q, wider_window) - excess(q)) * window_effect(q) : 0.0;
    double const image = image_bound() * (highest_ - q);
    return std::hypot(scrambling, smoothing, image) / (1.0 - confidence);
}

}  // namespace model
