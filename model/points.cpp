#include "model/points.hpp"

#include "model/parallel.hpp"

#include <Random123/philox.h>
#include <boost/math/distributions/normal.hpp>
#include <boost/random/sobol.hpp>

#include <array>
#include <bit>
#include <cmath>
#include <cstdint>
#include <numbers>

namespace model {
namespace {

constexpr double reach = 10.0;        // of a quadrature rule along its first axis
constexpr double reach_across = 8.0;  // and across it
constexpr double step_across = 0.5;

double density(double z) {
    return std::exp(-0.5 * z * z) / std::sqrt(2.0 * std::numbers::pi);
}

// Orthonormal axes, the first along `direction`: Householder's reflection, which moves the others
// as little as can be.
Eigen::MatrixXd axes_along(Eigen::VectorXd const& direction) {
    auto const size = direction.size();
    Eigen::MatrixXd axes = Eigen::MatrixXd::Identity(size, size);
    double const length = direction.norm();
    if (length == 0.0) return axes;
    double const sign = direction[0] < 0.0 ? -1.0 : 1.0;
    Eigen::VectorXd v = direction / length;
    v[0] += sign;
    return axes - (2.0 / v.squaredNorm()) * v * v.transpose();
}

// A rule's points of every part, interleaved.
std::vector<Part> in_parts(Eigen::MatrixXd const& factors, std::vector<double> const& weight) {
    std::vector<Part> parts(parts_max);
    auto const count = static_cast<std::size_t>(factors.cols()) / parts_max;
    for (std::size_t p = 0; p < parts_max; ++p) {
        parts[p].factors.resize(factors.rows(), static_cast<Eigen::Index>(count));
        for (std::size_t n = 0; n < count; ++n) {
            std::size_t const from = n * parts_max + p;
            parts[p].factors.col(static_cast<Eigen::Index>(n)) =
                factors.col(static_cast<Eigen::Index>(from));
            parts[p].weight.push_back(weight[from] * parts_max);
        }
    }
    return parts;
}

std::vector<Part> line(std::size_t points) {
    Eigen::MatrixXd factors(1, static_cast<Eigen::Index>(points));
    std::vector<double> weight;
    double const step = 2.0 * reach / static_cast<double>(points);
    for (std::size_t i = 0; i < points; ++i) {
        double const z = -reach + (static_cast<double>(i) + 0.5) * step;
        factors(0, static_cast<Eigen::Index>(i)) = z;
        weight.push_back(step * density(z));
    }
    return in_parts(factors, weight);
}

std::vector<Part> plane(std::size_t points, Eigen::VectorXd const& direction) {
    Eigen::MatrixXd const axes = axes_along(direction);
    double const step = 2.0 * reach / static_cast<double>(points);
    auto const across = static_cast<std::size_t>(2.0 * reach_across / step_across) + 1;
    Eigen::MatrixXd factors(2, static_cast<Eigen::Index>(points * across));
    std::vector<double> weight;
    for (std::size_t j = 0; j < across; ++j)
        for (std::size_t i = 0; i < points; ++i) {
            Eigen::Vector2d const own{-reach + (static_cast<double>(i) + 0.5) * step,
                                      -reach_across + static_cast<double>(j) * step_across};
            factors.col(static_cast<Eigen::Index>(weight.size())) = axes * own;
            weight.push_back(step * step_across * density(own[0]) * density(own[1]));
        }
    return in_parts(factors, weight);
}

// One coordinate's scrambling: the digits of a number in base 2 by a random lower triangular matrix
// with a unit diagonal, then shifted.
class Scrambling {
public:
    Scrambling(std::uint64_t seed, std::uint32_t part, std::uint32_t dimension) {
        r123::Philox4x32::key_type const key{
            {static_cast<std::uint32_t>(seed), static_cast<std::uint32_t>(seed >> 32U)}};
        for (std::uint32_t draw = 0; draw < 9; ++draw) {
            auto const words = r123::Philox4x32{}({{part, dimension, draw, 0x5c4a}}, key);
            for (std::uint32_t w = 0; w < 4; ++w) {
                std::uint32_t const bit = draw * 4 + w;
                if (bit < rows_.size()) {
                    std::uint32_t const own = 0x80000000U >> bit;
                    rows_[bit] = (words[w] & ~(own | (own - 1))) | own;  // it and those above
                } else if (bit == rows_.size()) {
                    shift_ = words[w];
                }
            }
        }
    }
    [[nodiscard]] std::uint32_t operator()(std::uint32_t digits) const {
        std::uint32_t scrambled = 0;
        for (std::uint32_t const row : rows_)
            scrambled =
                scrambled << 1U | (static_cast<std::uint32_t>(std::popcount(digits & row)) & 1U);
        return scrambled ^ shift_;
    }

private:
    std::array<std::uint32_t, 32> rows_{};
    std::uint32_t shift_ = 0;
};

std::vector<Part> net(Plan const& plan, Eigen::Index factors, unsigned threads) {
    std::uint32_t total = 0;
    for (auto const& component : plan.mixture) total += component.points;
    // The first point of the sequence, all zeros, is one Boost leaves out, and a net needs it.
    auto const dimensions = static_cast<std::size_t>(factors);
    std::vector<std::uint32_t> digits(total * dimensions, 0);
    boost::random::sobol sequence{dimensions};
    for (std::size_t i = dimensions; i < digits.size(); ++i)
        digits[i] = static_cast<std::uint32_t>(sequence() >> 32U);

    std::vector<Part> parts(plan.scramblings);
    for_each_of(parts.size(), threads, [&](std::size_t p) {
        auto& [points, weight] = parts[p];
        points.resize(factors, total);
        std::vector<Scrambling> scramble;
        for (std::uint32_t d = 0; d < dimensions; ++d)
            scramble.emplace_back(plan.seed, static_cast<std::uint32_t>(p), d);
        boost::math::normal const normal;
        for (std::size_t i = 0; i < total; ++i)
            for (std::size_t d = 0; d < dimensions; ++d) {
                double const u = (scramble[d](digits[i * dimensions + d]) + 0.5) * 0x1p-32;
                points(static_cast<Eigen::Index>(d), static_cast<Eigen::Index>(i)) =
                    u < 0.5 ? quantile(normal, u) : quantile(complement(normal, 1.0 - u));
            }
        // The defensive component takes the axes of the first.
        Eigen::Index from = 0;
        for (auto const& [mean, count] : plan.mixture) {
            auto const& direction = mean.isZero(0.0) ? plan.mixture.front().mean : mean;
            auto block = points.middleCols(from, count);
            block = ((axes_along(direction) * block).colwise() + mean).eval();
            from += count;
        }
        for (Eigen::Index i = 0; i < points.cols(); ++i)
            weight.push_back(1.0 / (mixture_density(plan, points.col(i)) * total));
    });
    return parts;
}

}  // namespace

double mixture_density(Plan const& plan, Eigen::Ref<Eigen::VectorXd const> const& factors) {
    double total = 0.0;
    double density = 0.0;
    for (auto const& [mean, count] : plan.mixture) {
        total += count;
        density += count * std::exp(mean.dot(factors) - 0.5 * mean.squaredNorm());
    }
    return density / total;
}

std::vector<Part> points(Plan const& plan, Eigen::Index factors, unsigned threads) {
    if (factors == 0) return {{Eigen::MatrixXd(0, 1), {1.0}}};
    std::size_t total = 0;
    for (auto const& component : plan.mixture) total += component.points;
    if (factors == 1) return line(total);
    if (factors == 2) return plane(total / 2, plan.mixture.front().mean);
    return net(plan, factors, threads);
}

}  // namespace model
