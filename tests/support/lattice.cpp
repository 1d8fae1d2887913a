#include "tests/support/lattice.hpp"

#include "model/dependence.hpp"
#include "model/migration.hpp"

#include <Eigen/Core>

#include <algorithm>
#include <cmath>
#include <stdexcept>

namespace tests {
namespace {

// The names that can default, and where their loss stands on the lattice.
struct Member {
    std::size_t name = 0;
    std::size_t loss = 0;  // in units
    double threshold = 0.0;
    double asset_correlation = 0.0;
    Eigen::VectorXd loading;  // of its index on the factors
};

struct Node {
    Eigen::VectorXd factors;
    double weight = 0.0;
};

std::vector<Member> members(Names const& names, model::Settings const& settings, double unit) {
    if (settings.loss != model::LossKind::default_only ||
        settings.loss_given_default_deviation != 0.0)
        throw std::invalid_argument("the lattice is for default_only and fixed recoveries");
    model::Migration const migration{settings};
    Eigen::MatrixXd const factor = model::factor(settings.indices.correlation);
    std::vector<Member> result;
    for (std::size_t i = 0; i < names.size(); ++i) {
        model::Name const& name = *names[i];
        if (name.grade == settings.grades.in_default()) continue;
        double const units = std::round(name.loss_at_default / unit);
        if (units < 0.0 || std::abs(units * unit - name.loss_at_default) > 1e-9 * unit)
            throw std::invalid_argument("a loss is not on the lattice");
        auto const blend = model::blend(settings, name.sector, name.country);
        result.push_back({.name = i,
                          .loss = static_cast<std::size_t>(units),
                          .threshold = migration.thresholds(name.grade).front(),
                          .asset_correlation = name.asset_correlation.value_or(
                              settings.asset_correlation[name.grade.rank]),
                          .loading = blend.first_weight * factor.row(blend.first).transpose() +
                                     blend.second_weight * factor.row(blend.second).transpose()});
    }
    return result;
}

std::vector<Node> nodes(Eigen::Index factors) {
    if (factors < 1 || factors > 2) throw std::invalid_argument("one or two factors");
    double const step = factors == 1 ? 1.0 / 64.0 : 1.0 / 8.0;
    std::vector<Node> result;
    auto const end = static_cast<int>(9.0 / step);
    for (int a = -end; a <= end; ++a)
        for (int b = factors == 1 ? 0 : -end; b <= (factors == 1 ? 0 : end); ++b) {
            Eigen::Vector2d const z{a * step, b * step};
            double const density = std::exp(-0.5 * z.squaredNorm());
            if (density < 1e-18) continue;
            result.push_back({.factors = z.head(factors), .weight = density});
        }
    double sum = 0.0;
    for (Node const& node : result) sum += node.weight;
    for (Node& node : result) node.weight /= sum;
    return result;
}

Eigen::ArrayXd default_probabilities(std::vector<Member> const& members, Node const& node) {
    Eigen::ArrayXd result(static_cast<Eigen::Index>(members.size()));
    Eigen::Index m = 0;
    for (Member const& member : members)
        result[m++] = model::probability_below(member.threshold, member.asset_correlation,
                                               member.loading.dot(node.factors));
    return result;
}

// One name more: its loss in units, its default probability.
void add(Eigen::ArrayXd& pmf, std::size_t loss, double p) {
    auto const v = static_cast<Eigen::Index>(loss);
    auto const rest = std::max<Eigen::Index>(pmf.size() - v, 0);
    Eigen::ArrayXd const moved = p * pmf.head(rest);
    pmf *= 1.0 - p;
    pmf.tail(rest) += moved;
}

Eigen::ArrayXd distribution(std::vector<Member> const& members, Eigen::ArrayXd const& p,
                            std::size_t bins, std::size_t without) {
    Eigen::ArrayXd pmf = Eigen::ArrayXd::Zero(static_cast<Eigen::Index>(bins));
    pmf[0] = 1.0;
    for (std::size_t m = 0; m < members.size(); ++m)
        if (m != without) add(pmf, members[m].loss, p[static_cast<Eigen::Index>(m)]);
    return pmf;
}

// The distribution without a name: the recursion undone, which is stable for p up to 1/2.
Eigen::ArrayXd undone(Eigen::ArrayXd pmf, std::size_t loss, double p) {
    auto const v = static_cast<Eigen::Index>(loss);
    for (Eigen::Index k = 0; k < pmf.size(); ++k)
        pmf[k] = (pmf[k] - (k >= v ? p * pmf[k - v] : 0.0)) / (1.0 - p);
    return pmf;
}

}  // namespace

Lattice lattice(Names const& names, model::Settings const& settings, double unit) {
    auto const those = members(names, settings, unit);
    auto const rule = nodes(model::factor(settings.indices.correlation).cols());
    std::size_t const none = those.size();
    std::size_t total = 0;
    for (Member const& member : those) total += member.loss;

    Eigen::ArrayXd pmf = Eigen::ArrayXd::Zero(static_cast<Eigen::Index>(total) + 1);
    Eigen::ArrayXd default_probability = Eigen::ArrayXd::Zero(static_cast<Eigen::Index>(none));
    for (Node const& node : rule) {
        auto const p = default_probabilities(those, node);
        default_probability += node.weight * p;
        pmf += node.weight * distribution(those, p, total + 1, none);
    }
    double below = 0.0;
    Eigen::Index q = 0;
    while (below + pmf[q] < settings.confidence * (1.0 - 1e-14)) below += pmf[q++];

    Lattice result;
    result.probability.assign(pmf.begin(), pmf.begin() + q + 1);
    result.loss_quantile = static_cast<double>(q) * unit;
    result.probability_beyond = pmf.tail(pmf.size() - 1 - q).sum();
    double const at_quantile = pmf[q];
    double const tail = 1.0 - settings.confidence;

    // By member: P(default, L = q) and P(default, L > q).
    Eigen::ArrayXd with_quantile = Eigen::ArrayXd::Zero(default_probability.size());
    Eigen::ArrayXd with_tail = default_probability;
    auto const bins = static_cast<std::size_t>(q) + 1;
    for (Node const& node : rule) {
        auto const p = default_probabilities(those, node);
        auto const whole = distribution(those, p, bins, none);
        for (std::size_t m = 0; m < none; ++m) {
            auto const at = static_cast<Eigen::Index>(m);
            Eigen::Index const left = q - static_cast<Eigen::Index>(those[m].loss);
            if (left < 0 || p[at] == 0.0) continue;
            auto const without = p[at] <= 0.5 && those[m].loss > 0
                                     ? undone(whole, those[m].loss, p[at])
                                     : distribution(those, p, bins, m);
            with_quantile[at] += node.weight * p[at] * without[left];
            with_tail[at] -= node.weight * p[at] * without.head(left + 1).sum();
        }
    }

    result.var_contribution.assign(names.size(), 0.0);
    result.es_contribution.assign(names.size(), 0.0);
    for (std::size_t m = 0; m < none; ++m) {
        auto const at = static_cast<Eigen::Index>(m);
        double const loss = static_cast<double>(those[m].loss) * unit;
        double const expected = loss * default_probability[at];
        double const given_quantile = loss * with_quantile[at] / at_quantile;
        double const es_contribution =
            (loss * with_tail[at] + given_quantile * (tail - result.probability_beyond)) / tail;
        result.expected_loss += expected;
        result.expected_shortfall += es_contribution;
        result.var_contribution[those[m].name] = given_quantile - expected;
        result.es_contribution[those[m].name] = es_contribution;
    }
    return result;
}

}  // namespace tests
