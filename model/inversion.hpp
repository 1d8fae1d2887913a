#pragma once

#include "model/plan.hpp"

#include <complex>
#include <cstddef>
#include <vector>

namespace model {

using Complex = std::complex<double>;

// By how much wider a window is that tells what the window does.
inline constexpr double wider_window = 1.25;

// From the transform of a loss back to its distribution, on one contour for all losses and all
// amounts.
//
//     phi(z) = E[e^{zL}]                      at z_k = damping + i k 2 pi / period, k = 0, 1, ...
//     density(x), P(L > x), E[(L - x)^+]  =   Re sum over k of weight_k phi(z_k)  -  images
//
// windowed: each node has the weight of the window W(z) = e^y (1 - y + y^2 / 2), y = (width z)^2 /
// 2, which stands for a loss smoothed by a kernel of the sixth order: a smooth distribution moves
// by the sixth power of the width. lattice: losses are multiples of the unit, nodes go once around
// the circle, and `density` is the mass of an atom over the unit.
//
// The trapezoidal rule returns a function's value at x plus its images, e^{j damping period} times
// its values at x + j period for all j: left of every loss they are known (probability 1, mean E[L]
// - x) and taken away; right of x they are what the period must make negligible.
//
// Source: Abate & Whitt (1992), The Fourier-series method for inverting transforms of probability
// distributions, Queueing Systems 10.
class Contour {
public:
    Contour() = default;
    explicit Contour(Plan const& plan);

    [[nodiscard]] std::vector<Complex> const& nodes() const { return nodes_; }
    [[nodiscard]] double step() const { return step_; }

    // Weights by node. `wider`: of a window so many times as wide.
    [[nodiscard]] std::vector<Complex> density(double x, double wider = 1.0) const;
    [[nodiscard]] std::vector<Complex> tail(double x, double wider = 1.0) const;
    [[nodiscard]] std::vector<Complex> excess(double x, double wider = 1.0) const;

    // What images add to a tail, for each unit of probability or of mean loss; and to the excess
    // over x of a loss with this mean.
    [[nodiscard]] double tail_image() const { return image_; }
    [[nodiscard]] double excess_image(double x, double probability, double mean) const {
        return (mean - x * probability) * image_ + period_ * probability * distant_image_;
    }

private:
    std::vector<Complex> nodes_;
    std::vector<Complex> above_;  // of an atom at a node: the sum of all atoms above it
    std::vector<Complex> from_;   // the same, itself included
    double step_ = 0.0;
    double width_ = 0.0;
    double period_ = 0.0;
    double image_ = 0.0;
    double distant_image_ = 0.0;
    bool lattice_ = false;
};

// The distribution of a loss by the transforms of its parts.
class LossCurve {
public:
    LossCurve() = default;
    // `transforms`: parts x nodes, of the loss less `base`; `mass` and `mean` by part: its sums of
    // weights and of weights times mean loss less base.
    LossCurve(Contour contour, Plan const& plan, double base, bool sampled,
              std::vector<std::vector<Complex>> transforms, std::vector<double> mass,
              std::vector<double> mean);

    // x in base currency; between lowest() and highest().
    [[nodiscard]] double density(double x) const;
    [[nodiscard]] double tail(double x, double wider = 1.0) const;    // P(L > x)
    [[nodiscard]] double excess(double x, double wider = 1.0) const;  // E[(L - x)^+]
    // min{x: P(L <= x) >= confidence}
    [[nodiscard]] double quantile(double confidence, double wider = 1.0) const;
    [[nodiscard]] double expected_shortfall(double confidence) const;

    // One standard error: the scramblings', the window's effect, and what images may add.
    [[nodiscard]] double tail_error(double x) const;
    [[nodiscard]] double quantile_error(double confidence) const;
    [[nodiscard]] double shortfall_error(double confidence) const;
    // What the window may have moved the quantile by.
    [[nodiscard]] double smoothing(double confidence) const;
    // What the window has moved a figure near x by, over what a wider one moves it by further: by
    // how that grows with the width, in proportion at an atom of the loss, with the sixth power
    // where it is smooth. (Aitken, 1926, On Bernoulli's numerical solution of algebraic equations,
    // Proceedings of the Royal Society of Edinburgh 46.)
    [[nodiscard]] double window_effect(double x) const;

    // By part. A functional: Re sum over k of weight_k phi(z_k).
    [[nodiscard]] std::vector<double> functional(std::vector<Complex> const& weights) const;
    [[nodiscard]] std::vector<double> tails(double x) const;
    [[nodiscard]] std::vector<double> excesses(double x) const;

    [[nodiscard]] double lowest() const { return lowest_; }
    [[nodiscard]] double highest() const { return highest_; }
    [[nodiscard]] Contour const& contour() const { return contour_; }
    [[nodiscard]] bool is_sampled() const { return sampled_; }
    // What the images right of the period may add to a tail, as a probability.
    [[nodiscard]] double image_bound() const;

private:
    Contour contour_;
    double base_ = 0.0;
    double lowest_ = 0.0;
    double highest_ = 0.0;
    double unit_ = 0.0;
    double width_ = 0.0;
    bool sampled_ = false;
    std::vector<std::vector<Complex>> transforms_;
    std::vector<double> mass_;
    std::vector<double> mean_;
    std::vector<Complex> pooled_;
    double pooled_mass_ = 1.0;
    double pooled_mean_ = 0.0;
};

// One standard error of the mean of independent parts.
double error_of_mean(std::vector<double> const& parts);

}  // namespace model
