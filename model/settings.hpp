#pragma once

#include "model/units.hpp"

#include <Eigen/Core>

#include <cstdint>
#include <map>
#include <string>
#include <vector>

// What model.yaml says, as values. The loader in config/ has checked every domain stated here.

namespace model {

enum class LossKind { default_only, revaluation };

// How many scenarios the judge draws, and the stream of random numbers, its own and the engine's.
struct SimulationPlan {
    std::uint64_t scenarios = 200'000;  // >= 1,000
    std::uint64_t seed = 1;
    friend bool operator==(SimulationPlan const&, SimulationPlan const&) = default;
};

// The systematic indices and their correlation: symmetric, unit diagonal, positive semi-definite.
struct SystematicIndices {
    std::vector<std::string> names;  // "sector:CODE", "country:CODE", ":others" of each, or "all"
    Eigen::MatrixXd correlation;     // names x names
};

// How much of a counterparty's index each kind makes up, before it is rescaled to unit variance.
// Either `all` is positive and the others 0, or `all` is 0. All are >= 0 and one is positive.
struct IndexWeights {
    double all = 0.0;
    double sector = 0.0;
    double country = 0.0;
};

struct Settings {
    std::string base_currency;  // ISO 4217
    int horizon_years = 1;      // whole years, >= 1
    double confidence = 0.999;  // in (0, 1)
    LossKind loss = LossKind::default_only;
    GradeScale grades;
    Eigen::MatrixXd transition;    // grades x (grades + default), one year, a row a grade
    Eigen::MatrixXd grade_values;  // revaluation: grades x grades, loss per unit of EAD; else empty
    Fraction loss_given_default;   // where the facility gives none
    double loss_given_default_deviation = 0.0;  // 0: fixed recoveries; else d^2 < m (1 - m)
    std::map<std::string, Fraction, std::less<>> conversion_factor;  // by product; has "others"
    SystematicIndices indices;
    IndexWeights index_weights;
    std::vector<double> asset_correlation;  // by grade, in [0, 0.99]
    std::vector<std::string> rating_sources;
    int rating_max_age_days = 550;
    Grade unrated_as;
    int fx_max_age_days = 5;
    SimulationPlan simulation;
};

}  // namespace model
