#pragma once

#include "model/assess.hpp"
#include "model/judge.hpp"

#include <cstddef>
#include <cstdint>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <vector>

// Whether the engine and the judge, which share nothing but thresholds and loadings, say the same
// of a book.

namespace model {

// So often is a book found to differ where both are right, whatever number of checks are made of
// it: each has an equal part of this (Bonferroni).
inline constexpr double false_alarms = 1e-3;

// How many names are checked one by one: those that contribute most to the shortfall by the engine.
inline constexpr std::size_t checked_names = 50;

struct Check {
    std::string what;
    std::string counterparty_id;  // empty: of the portfolio
    double engine = 0.0;
    double judge = 0.0;
    std::optional<double> off;  // engine less judge, in standard errors of that
    double false_alarm = 1.0;   // how often as much or more where both are right
    bool agrees = true;
};

struct Verdict {
    std::vector<Check> checks;
    [[nodiscard]] bool agrees() const;
};

// The checks, `names` as both were given them:
//
//     expected loss           against the sum over grades of each grade's amounts times where it
//                             moves to; they agree within rounding
//     quantile, shortfall     the difference over the error of the difference, against Student's t
//                             with the degrees of freedom of Welch (1947), The generalization of
//                             'Student's' problem when several different population variances are
//                             involved, Biometrika 34
//     es_contribution         the same, of each of the largest
//     the other names         in groups alike in grade, sector and country: what each has less its
//                             share of the whole. The sum of squares of these in errors, X = sum of
//                             z_g^2, has mean G and variance 2 tr(R^2) for z with correlation R,
//                             and so has c times a chi squared variable with G / c degrees of
//                             freedom for c = tr(R^2) / G: Box (1954), Some theorems on quadratic
//                             forms applied in the study of analysis of variance problems I, Annals
//                             of Mathematical Statistics 25. `engine` is X, `judge` its mean.
Verdict compare(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
                Figures const& engine, Judgement const& judge);

}  // namespace model
