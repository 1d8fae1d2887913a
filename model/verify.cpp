#include "model/verify.hpp"

#include <boost/math/distributions/chi_squared.hpp>
#include <boost/math/distributions/normal.hpp>
#include <boost/math/distributions/students_t.hpp>

#include <algorithm>
#include <cmath>
#include <functional>
#include <limits>
#include <numeric>
#include <tuple>
#include <utility>

namespace model {
namespace {

// What agrees within rounding, as a part of the shortfall.
constexpr double rounding = 1e-9;
constexpr std::size_t groups_max = 32;
constexpr std::size_t names_per_group_min = 20;

// A figure by both, with standard errors and the degrees of freedom these were estimated with.
struct Pair {
    double engine = 0.0;
    double engine_error = 0.0;
    double engine_freedom = 0.0;
    double judge = 0.0;
    double judge_error = 0.0;
    double judge_freedom = 0.0;
};

double variance(Pair const& pair) {
    return pair.engine_error * pair.engine_error + pair.judge_error * pair.judge_error;
}

double welch_freedom(Pair const& pair) {
    double const squares = std::pow(pair.engine_error, 4) / pair.engine_freedom +
                           std::pow(pair.judge_error, 4) / pair.judge_freedom;
    return squares > 0.0 ? std::pow(variance(pair), 2) / squares : pair.judge_freedom;
}

// The probability of a t variable further from 0, on either side.
double beyond(double t, double freedom) {
    boost::math::students_t const law{freedom};
    return 2.0 * boost::math::cdf(boost::math::complement(law, std::abs(t)));
}

Check check(std::string what, Pair const& pair, double scale) {
    Check result{.what = std::move(what),
                 .counterparty_id = {},
                 .engine = pair.engine,
                 .judge = pair.judge,
                 .off = std::nullopt};
    double const difference = pair.engine - pair.judge;
    double const error = std::sqrt(variance(pair));
    if (!std::isfinite(difference) || !std::isfinite(error)) {
        result.false_alarm = 0.0;
    } else if (error > rounding * scale) {
        result.off = difference / error;
        result.false_alarm = beyond(*result.off, welch_freedom(pair));
    } else {
        result.false_alarm = std::abs(difference) <= 2.0 * rounding * scale ? 1.0 : 0.0;
    }
    return result;
}

// By grade: what its names have together, times where they may be.
double expected_loss(std::span<std::shared_ptr<Name const> const> names, Settings const& settings) {
    Migration const migration{settings};
    auto const grades = static_cast<Eigen::Index>(settings.grades.size());
    Eigen::VectorXd exposure = Eigen::VectorXd::Zero(grades);
    Eigen::VectorXd lost = Eigen::VectorXd::Zero(grades);
    for (auto const& name : names) {
        if (name->grade == settings.grades.in_default()) continue;
        exposure[name->grade.rank] += name->exposure_at_default.units();
        lost[name->grade.rank] += name->loss_at_default;
    }
    double sum = lost.dot(migration.matrix().col(grades));
    if (settings.loss == LossKind::revaluation)
        sum += exposure.dot(migration.matrix()
                                .leftCols(grades)
                                .cwiseProduct(settings.grade_values)
                                .rowwise()
                                .sum());
    return sum;
}

// The names by falling contribution, the largest first.
std::vector<std::uint32_t> by_contribution(Figures const& engine) {
    std::vector<std::uint32_t> order(engine.names.size());
    std::iota(order.begin(), order.end(), 0U);
    std::ranges::stable_sort(order, std::greater{},
                             [&](std::uint32_t i) { return engine.names[i].es_contribution; });
    return order;
}

// Names alike, cut into groups that contribute about as much each.
std::vector<std::vector<std::uint32_t>> groups_of(
    std::span<std::shared_ptr<Name const> const> names, Figures const& engine,
    std::vector<std::uint32_t> rest) {
    std::ranges::stable_sort(rest, {}, [&](std::uint32_t i) {
        return std::tie(names[i]->sector, names[i]->grade, names[i]->country);
    });
    auto const size = [&](std::uint32_t i) { return std::abs(engine.names[i].es_contribution); };
    double total = 0.0;
    for (auto const i : rest) total += size(i);
    auto const count = std::clamp<std::size_t>(rest.size() / names_per_group_min, 1, groups_max);
    std::vector<std::vector<std::uint32_t>> groups(1);
    double reached = 0.0;
    for (auto const i : rest) {
        if (reached >= total * static_cast<double>(groups.size()) / static_cast<double>(count) &&
            groups.size() < count)
            groups.emplace_back();
        groups.back().push_back(i);
        reached += size(i);
    }
    return groups;
}

// What each independent source of error, a scrambling of the engine or a batch of the judge, does
// to (sum of the members' es_contributions - share x all).
struct Sources {
    Eigen::ArrayXd engine;
    Eigen::ArrayXd judge;
};
Sources sources(Figures const& engine, Judgement const& judge,
                std::span<std::uint32_t const> members, double share) {
    auto const& spread = engine.es_spread;
    Sources result;
    result.engine.resize(static_cast<Eigen::Index>(spread.sources));
    for (std::size_t s = 0; s < spread.sources; ++s) {
        double sum = -share * spread.of_all[s];
        for (auto const i : members) sum += double{spread.of[i * spread.sources + s]};
        result.engine[static_cast<Eigen::Index>(s)] = sum;
    }
    auto const& tail = judge.sums.tail;
    result.judge = -share * (tail.loss - judge.sums.quantile * tail.weight);
    for (auto const i : members)
        result.judge += tail.moves.row(i).transpose().array() +
                        (judge.sums.base[i] - judge.sums.at_quantile[i]) * tail.weight;
    result.judge -= result.judge.mean();
    auto const batches = static_cast<double>(result.judge.size());
    result.judge *= std::sqrt(batches / (batches - 1.0)) /
                    (judge.sums.scenarios * (1.0 - judge.sums.confidence));
    return result;
}

// The value of a standard normal variable as rarely beyond as t is.
double normal_score(double t, double freedom) {
    double const tail = std::max(0.5 * beyond(t, freedom), std::numeric_limits<double>::min());
    return boost::math::quantile(boost::math::complement(boost::math::normal{}, tail));
}

}  // namespace

bool Verdict::agrees() const {
    return std::ranges::all_of(checks, &Check::agrees);
}

Verdict compare(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
                Figures const& engine, Judgement const& judge) {
    Verdict verdict;
    auto& checks = verdict.checks;
    auto const& ours = engine.totals;
    auto const& theirs = judge.totals;
    double const scale = std::max({std::abs(ours.expected_shortfall), std::abs(ours.expected_loss),
                                   std::abs(ours.loss_quantile)});
    double const judge_freedom =
        std::max(1.0, static_cast<double>(judge.sums.tail.weight.size()) - 1.0);
    // A quadrature rule's error is bounded, not estimated.
    double const engine_freedom = engine.plan.scramblings > 1 ? engine.plan.scramblings - 1.0 : 1e6;
    auto const pair = [&](double a, double a_error, double b, double b_error) {
        return Pair{a, a_error, engine_freedom, b, b_error, judge_freedom};
    };

    checks.push_back(check("expected_loss",
                           pair(ours.expected_loss, 0.0, expected_loss(names, settings), 0.0),
                           scale));
    checks.push_back(check("loss_quantile",
                           pair(ours.loss_quantile, ours.loss_quantile_error, theirs.loss_quantile,
                                theirs.loss_quantile_error),
                           scale));
    checks.push_back(check("expected_shortfall",
                           pair(ours.expected_shortfall, ours.expected_shortfall_error,
                                theirs.expected_shortfall, theirs.expected_shortfall_error),
                           scale));

    auto order = by_contribution(engine);
    std::erase_if(order,
                  [&](std::uint32_t i) { return names[i]->grade == settings.grades.in_default(); });
    auto const single = std::min(order.size(), checked_names);
    for (auto const i : std::span{order}.first(single)) {
        auto const& a = engine.names[i];
        auto const& b = judge.names[i];
        auto const sharp = std::ranges::find(judge.sharpened, i, &Sharpened::name);
        bool const sharper = sharp != judge.sharpened.end();
        checks.push_back(
            check("es_contribution",
                  pair(a.es_contribution, a.es_contribution_error,
                       sharper ? sharp->es_contribution : b.es_contribution,
                       sharper ? sharp->es_contribution_error : b.es_contribution_error),
                  scale));
        checks.back().counterparty_id = names[i]->counterparty_id;
    }

    std::vector<Sources> errors;
    std::vector<double> variances;
    double squares = 0.0;
    bool certain = true;  // what has no error agrees within rounding
    if (single < order.size()) {
        order.erase(order.begin(), order.begin() + static_cast<std::ptrdiff_t>(single));
        for (auto const& members : groups_of(names, engine, std::move(order))) {
            double of_engine = 0.0;
            double of_judge = 0.0;
            for (auto const i : members) {
                of_engine += engine.names[i].es_contribution;
                of_judge += judge.names[i].es_contribution;
            }
            double const share = scale > 0.0 ? of_engine / ours.expected_shortfall : 0.0;
            auto const both = pair(0.0, engine.contribution_error(Contribution::es, members, share),
                                   of_judge - share * theirs.expected_shortfall,
                                   judge.contribution_error(Contribution::es, members, share));
            auto const group = check({}, both, scale);
            if (!group.off) {
                certain = certain && group.false_alarm == 1.0;
                continue;
            }
            squares += std::pow(normal_score(*group.off, welch_freedom(both)), 2);
            errors.push_back(sources(engine, judge, members, share));
            variances.push_back(variance(both));
        }
        auto const count = static_cast<double>(errors.size());
        double trace = 0.0;  // of R^2
        for (std::size_t g = 0; g < errors.size(); ++g)
            for (std::size_t h = 0; h < errors.size(); ++h) {
                double const together = (errors[g].engine * errors[h].engine).sum() +
                                        (errors[g].judge * errors[h].judge).sum();
                trace += g == h ? 1.0 : together * together / (variances[g] * variances[h]);
            }
        Check rest{.what = "the other names, chi squared",
                   .counterparty_id = {},
                   .engine = squares,
                   .judge = count,
                   .off = std::nullopt};
        if (count > 0.0) {
            double const scaled_by = trace / count;
            rest.false_alarm = boost::math::cdf(boost::math::complement(
                boost::math::chi_squared{count / scaled_by}, squares / scaled_by));
        }
        if (!certain) rest.false_alarm = 0.0;
        checks.push_back(std::move(rest));
    }

    for (auto& one : checks)
        one.agrees = one.false_alarm >= false_alarms / static_cast<double>(checks.size());
    return verdict;
}

}  // namespace model
