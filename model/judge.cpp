#include "model/judge.hpp"

#include "model/parallel.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <functional>
#include <limits>
#include <numeric>
#include <stdexcept>
#include <tuple>
#include <utility>

namespace model {
namespace {

// An atom of the loss at the quantile that holds so many scenarios is conditioned on by itself;
// else the band is so wide, as a share of the quantile's distance.
constexpr std::uint64_t atom_scenarios_min = 30;
constexpr double band_share = 0.01;
// A mean over fewer scenarios, by the spread of its batches, is not told from its own error.
constexpr double means_min = 50.0;

constexpr double infinity = std::numeric_limits<double>::infinity();

void ensure(bool holds, char const* what) {
    if (!holds) throw std::logic_error(what);
}

double weight(Simulation::Sample const& sample, std::size_t scenario) {
    return sample.weight.empty() ? 1.0 : sample.weight[scenario];
}

// Ranges of scenarios that follow one another, each of whole rounds of the strata. For more names
// fewer, for the sake of memory.
class Batches {
public:
    Batches(std::uint64_t scenarios, std::size_t names)
        : scenarios_{scenarios}, count_{names <= 250'000 ? 64U : 16U} {}

    [[nodiscard]] std::size_t count() const { return count_; }
    [[nodiscard]] std::uint64_t begin(std::size_t batch) const {
        if (batch == count_) return scenarios_;
        std::uint64_t const even =
            scenarios_ / count_ * batch + scenarios_ % count_ * batch / count_;
        return even - even % FactorLaw::strata;
    }

private:
    std::uint64_t scenarios_;
    std::size_t count_;
};

// The variance of a sum, from the sums of independent batches.
double variance_of_sum(Eigen::ArrayXd const& sums) {
    auto const count = static_cast<double>(sums.size());
    return (sums - sums.mean()).square().sum() * count / (count - 1.0);
}

// Scenarios by falling loss, the first ones, that have a weight of at least `wanted` or are all.
std::vector<std::uint64_t> largest(Simulation::Sample const& sample, double wanted) {
    auto const& loss = sample.loss;
    auto const falling = [&](std::uint64_t a, std::uint64_t b) {
        return loss[a] > loss[b] || (loss[a] == loss[b] && a < b);
    };
    std::vector<std::uint64_t> order(loss.size());
    std::iota(order.begin(), order.end(), 0U);
    auto sorted = order.begin();
    double reached = 0.0;
    auto more = std::max<std::ptrdiff_t>(1'000, static_cast<std::ptrdiff_t>(wanted));
    while (reached < wanted && sorted != order.end()) {
        auto const to = sorted + std::min(more, order.end() - sorted);
        if (to != order.end()) std::nth_element(sorted, to, order.end(), falling);
        std::sort(sorted, to, falling);
        for (; sorted != to; ++sorted) reached += weight(sample, *sorted);
        more *= 4;
    }
    order.erase(sorted, order.end());
    return order;
}

struct Quantile {
    double value = 0.0;
    double error = 0.0;
};

// The smallest x that no more than (1 - confidence) of the weight is above, and its error.
//
// The weight above is a mean over the scenarios; let s be its standard error, an atom at x parted
// by lot so that just (1 - confidence) is above. The error is how far x moves if the weight is off
// by s. In a lumpy book one s to the side may show no change where three do, so the widest of 1, 2
// and 3 s counts. Less than no weight above stands for `all_lost`.
Quantile quantile(Simulation::Sample const& sample, Batches const& batches, double confidence,
                  double weight_max, double all_lost) {
    auto const& loss = sample.loss;
    // A hair is added since 1 - confidence is rounded.
    double const wanted = static_cast<double>(loss.size()) * (1.0 - confidence) * (1.0 + 1e-12);
    auto const order = largest(sample, wanted + 3.0 * std::sqrt(wanted * weight_max));
    std::vector<double> weight_down_to;
    double reached = 0.0;
    for (std::uint64_t const s : order) weight_down_to.push_back(reached += weight(sample, s));
    auto const with_weight_above = [&](double at_most) {
        if (at_most < 0.0) return all_lost;
        auto const found = std::ranges::upper_bound(weight_down_to, at_most);
        auto const k = std::min<std::ptrdiff_t>(found - weight_down_to.begin(),
                                                static_cast<std::ptrdiff_t>(order.size()) - 1);
        return loss[order[static_cast<std::size_t>(k)]];
    };
    Quantile result{.value = with_weight_above(wanted)};

    auto const count = static_cast<Eigen::Index>(batches.count());
    Eigen::ArrayXd above = Eigen::ArrayXd::Zero(count);
    Eigen::ArrayXd at = Eigen::ArrayXd::Zero(count);
    double squares_at = 0.0;
    for (Eigen::Index b = 0; b < count; ++b) {
        auto const batch = static_cast<std::size_t>(b);
        for (std::uint64_t s = batches.begin(batch); s < batches.begin(batch + 1); ++s) {
            double const w = weight(sample, s);
            if (loss[s] > result.value) above[b] += w;
            if (loss[s] == result.value) {
                at[b] += w;
                squares_at += w * w;
            }
        }
    }
    double const share = std::clamp((wanted - above.sum()) / at.sum(), 0.0, 1.0);
    double const deviation =
        std::sqrt(variance_of_sum(above + share * at) + share * (1.0 - share) * squares_at);
    for (double const steps : {1.0, 2.0, 3.0}) {
        double const high = with_weight_above(wanted - steps * deviation);
        double const low = with_weight_above(wanted + steps * deviation);
        result.error = std::max(result.error, (high - low) / (2.0 * steps));
    }
    return result;
}

// ---- where the tail comes from ----

constexpr int pilot_steps = 4;
constexpr int clusters_max = 6;
constexpr int defensive_sixteenths = 2;
constexpr double candidate_cost = 1.01;
constexpr std::array lengths{0.25, 0.5, 0.75, 1.25};
// A tail must have the variance of so many equal weights to take a mean over.
constexpr double tail_points_min = 100.0;
// The pilot draws from the far end of the seed's scenarios.
constexpr std::uint64_t pilot_scenario = std::uint64_t{1} << 62U;

// Factors that the largest losses of a pilot came from, and their weights.
struct PilotTail {
    Eigen::MatrixXd points;  // factors x points
    Eigen::VectorXd weights;
    Eigen::ArrayXd squares;  // w x (1 + (excess over the least of the losses / mean excess)^2)
};

PilotTail pilot_tail(Simulation const& simulation, FactorLaw const& law, std::uint64_t first,
                     std::size_t scenarios, double confidence, unsigned threads) {
    auto const sample = simulation.sample(law, first, scenarios, threads);
    auto const order = largest(sample, static_cast<double>(scenarios));
    double const wanted = static_cast<double>(scenarios) * (1.0 - confidence);
    double sum = 0.0;
    double squares = 0.0;
    std::size_t count = 0;
    while (count < order.size() && (sum < wanted || sum * sum < tail_points_min * squares)) {
        double const w = weight(sample, order[count++]);
        sum += w;
        squares += w * w;
    }
    PilotTail tail;
    auto const size = static_cast<Eigen::Index>(count);
    tail.weights.resize(size);
    Eigen::ArrayXd excess(size);
    for (Eigen::Index k = 0; k < size; ++k) {
        std::uint64_t const s = order[static_cast<std::size_t>(k)];
        Eigen::VectorXd const point = simulation.factors(law, first + s);
        if (k == 0) tail.points.resize(point.size(), size);
        tail.points.col(k) = point;
        tail.weights[k] = weight(sample, s);
        excess[k] = sample.loss[s] - sample.loss[order[count - 1]];
    }
    double const mean_excess = tail.weights.dot(excess.matrix()) / tail.weights.sum();
    tail.squares = tail.weights;
    if (mean_excess > 0.0) tail.squares *= 1.0 + (excess / mean_excess).square();
    return tail;
}

// The mean of the points around each of so many centres, nearest to nearest: k-means (Lloyd, 1982,
// Least squares quantization in PCM, IEEE Transactions on Information Theory 28(2)), started from
// the mean and then, one by one, from the point that weighs most by its squared distance.
Eigen::MatrixXd cluster_means(PilotTail const& tail, int count) {
    auto const& points = tail.points;
    auto const& weights = tail.weights;
    Eigen::MatrixXd means = points * weights / weights.sum();
    constexpr int rounds = 20;
    for (int size = 2; size <= count; ++size) {
        Eigen::VectorXd nearest = Eigen::VectorXd::Constant(points.cols(), infinity);
        for (auto const& mean : means.colwise())
            nearest =
                nearest.cwiseMin((points.colwise() - mean).colwise().squaredNorm().transpose());
        Eigen::Index furthest = 0;
        weights.cwiseProduct(nearest).maxCoeff(&furthest);
        means.conservativeResize(Eigen::NoChange, size);
        means.col(size - 1) = points.col(furthest);
        for (int round = 0; round < rounds; ++round) {
            Eigen::MatrixXd sums = Eigen::MatrixXd::Zero(means.rows(), size);
            Eigen::VectorXd shares = Eigen::VectorXd::Zero(size);
            for (Eigen::Index p = 0; p < points.cols(); ++p) {
                Eigen::Index k = 0;
                (means.colwise() - points.col(p)).colwise().squaredNorm().minCoeff(&k);
                sums.col(k) += weights[p] * points.col(p);
                shares[k] += weights[p];
            }
            for (Eigen::Index k = 0; k < size; ++k)
                if (shares[k] > 0.0) means.col(k) = sums.col(k) / shares[k];
        }
    }
    return means;
}

// The mixture of some of the candidates (the first of them 0) under which the probability and the
// mean excess of the tail have least variance, which rises with the means of w 1(tail) and of
// w excess^2: sixteenth by sixteenth to where it gains most, but for those that stay at 0 to bound
// the weights. A candidate more must be worth its while.
FactorLaw best_mixture(PilotTail const& tail, Eigen::MatrixXd const& candidates) {
    Eigen::ArrayXXd ratio = (tail.points.transpose() * candidates).array();  // component / phi
    for (Eigen::Index c = 0; c < candidates.cols(); ++c)
        ratio.col(c) =
            (ratio.col(c) - 0.5 * candidates.col(c).squaredNorm()).exp() / FactorLaw::strata;
    std::vector<int> sixteenths(static_cast<std::size_t>(candidates.cols()), 0);
    sixteenths[0] = defensive_sixteenths;
    Eigen::ArrayXd mixed = defensive_sixteenths * ratio.col(0);
    for (int given = defensive_sixteenths; given < FactorLaw::strata; ++given) {
        Eigen::Index best = 0;
        double least = infinity;
        for (Eigen::Index c = 0; c < candidates.cols(); ++c) {
            double const cost = sixteenths[static_cast<std::size_t>(c)] > 0 ? 1.0 : candidate_cost;
            double const moment = cost * (tail.squares / (mixed + ratio.col(c))).sum();
            if (moment < least) std::tie(least, best) = std::pair{moment, c};
        }
        mixed += ratio.col(best);
        ++sixteenths[static_cast<std::size_t>(best)];
    }

    if (sixteenths[0] == FactorLaw::strata) return {};
    Eigen::MatrixXd means = candidates;
    Eigen::Index kept = 0;
    for (Eigen::Index c = 0; c < candidates.cols(); ++c)
        if (sixteenths[static_cast<std::size_t>(c)] > 0) means.col(kept++) = candidates.col(c);
    std::erase(sixteenths, 0);
    return {means.leftCols(kept), sixteenths};
}

// The cross-entropy method (de Boer, Kroese, Mannor & Rubinstein, 2005, A tutorial on the
// cross-entropy method, Annals of Operations Research 134): of the normals of unit variance, the
// one around E[Z | L >= quantile] is nearest to the factors that losses beyond the quantile come
// from. The pilot finds that mean in steps, each drawn from around the last and going as far into
// the tail as it holds enough points. At last a mixture is made of it, of means nearer and further
// on its ray, and of means of clusters of the points, in case the tail is reached from several
// sides.
FactorLaw find_law(Simulation const& simulation, JudgePlan const& plan, double confidence,
                   unsigned threads) {
    auto const scenarios =
        static_cast<std::size_t>(std::clamp<std::uint64_t>(plan.scenarios / 16, 2'000, 32'000));
    FactorLaw law;
    for (int step = 1; step <= pilot_steps; ++step) {
        auto const first = pilot_scenario + static_cast<std::uint64_t>(step) * scenarios;
        PilotTail const tail = pilot_tail(simulation, law, first, scenarios, confidence, threads);
        Eigen::MatrixXd const mean = cluster_means(tail, 1);
        Eigen::MatrixXd candidates = Eigen::MatrixXd::Zero(mean.rows(), 1);
        auto const add = [&](Eigen::MatrixXd const& means) {
            candidates.conservativeResize(Eigen::NoChange, candidates.cols() + means.cols());
            candidates.rightCols(means.cols()) = means;
        };
        add(mean);
        if (step == pilot_steps) {
            for (double const length : lengths) add(length * mean);
            for (int count = 2; count <= clusters_max; ++count) add(cluster_means(tail, count));
        }
        law = best_mixture(tail, candidates);
    }
    return law;
}

// ---- sums over tail and band ----

// The names whose contributions are sharpened, and their sums over tail and band.
struct Sharp {
    struct Part {
        Eigen::MatrixXd sum;   // names x batches: of w x E[move; the loss with it is in the part]
        Eigen::MatrixXd most;  // the largest of those summed
        void add(Eigen::Index name, Eigen::Index batch, double amount) {
            sum(name, batch) += amount;
            most(name, batch) = std::max(most(name, batch), std::abs(amount));
        }
    };
    std::vector<std::uint32_t> names;
    Part tail;
    Part band;
    double reach = 0.0;  // a scenario whose loss is so far from tail and band has no part in them
};

Sharp largest_in_tail(Simulation const& simulation, FactorLaw const& law,
                      Simulation::Sample const& sample, double quantile, std::size_t count,
                      bool gains) {
    Sharp sharp;
    if (count == 0) return sharp;
    constexpr std::size_t looked_at = 5'000;
    std::vector<std::uint64_t> beyond;
    for (std::uint64_t s = 0; s < sample.loss.size(); ++s)
        if (sample.loss[s] >= quantile) beyond.push_back(s);
    beyond.resize(std::min(beyond.size(), looked_at));
    double weights = 0.0;
    for (std::uint64_t const s : beyond) weights += weight(sample, s);
    std::vector<double> sums = simulation.base();
    for (double& sum : sums) sum *= weights;
    simulation.visit(law, beyond, [&](std::size_t k, auto const& moves, Eigen::VectorXd const&) {
        for (auto const& [name, amount] : moves) sums[name] += weight(sample, beyond[k]) * amount;
    });
    sharp.names.resize(sums.size());
    std::iota(sharp.names.begin(), sharp.names.end(), 0U);
    std::ranges::stable_sort(sharp.names, std::greater{}, [&](std::uint32_t i) { return sums[i]; });
    sharp.names.resize(std::min(count, sums.size()));
    for (std::uint32_t const i : sharp.names)
        sharp.reach = std::max(sharp.reach, (gains ? 2.0 : 1.0) * simulation.largest()[i]);
    return sharp;
}

void draw_sums(JudgedSums& sums, Sharp& sharp, Simulation const& simulation, FactorLaw const& law,
               Simulation::Sample const& sample, Batches const& batches, double half_width,
               unsigned threads) {
    auto const names = sums.base.size();
    auto const count = static_cast<Eigen::Index>(batches.count());
    for (auto* part : {&sums.tail, &sums.band}) {
        part->moves = Eigen::MatrixXd::Zero(names, count);
        part->weight = part->loss = Eigen::ArrayXd::Zero(count);
    }
    for (auto* part : {&sharp.tail, &sharp.band})
        part->sum = part->most =
            Eigen::MatrixXd::Zero(static_cast<Eigen::Index>(sharp.names.size()), count);
    std::vector<Eigen::Index> place(static_cast<std::size_t>(names), -1);  // among the sharpened
    for (std::size_t j = 0; j < sharp.names.size(); ++j)
        place[sharp.names[j]] = static_cast<Eigen::Index>(j);
    double const q = sums.quantile;
    double const hair = 0.5 * simulation.step();  // equal losses are equal in spite of rounding
    std::vector<std::array<std::uint64_t, 2>> scenarios(batches.count());

    auto const draw = [&](std::size_t batch) {
        auto const b = static_cast<Eigen::Index>(batch);
        std::vector<std::uint64_t> chosen;
        for (std::uint64_t s = batches.begin(batch); s < batches.begin(batch + 1); ++s)
            if (sample.loss[s] >= q - half_width - sharp.reach) chosen.push_back(s);
        std::vector<double> own(sharp.names.size(), 0.0);  // moves of the sharpened
        auto const visit = [&](std::size_t k, std::span<Simulation::Move const> moves,
                               Eigen::VectorXd const& indices) {
            double const loss = sample.loss[chosen[k]];
            double const w = weight(sample, chosen[k]);
            auto const add_to = [&](JudgedSums::Part& part) {
                for (auto const& [name, amount] : moves) part.moves(name, b) += w * amount;
                part.weight[b] += w;
                part.loss[b] += w * loss;
            };
            if (loss > q) {
                add_to(sums.tail);
                ++scenarios[batch][0];
            }
            if (std::abs(loss - q) <= half_width) {
                add_to(sums.band);
                ++scenarios[batch][1];
            }

            if (own.empty()) return;
            for (auto const& [name, amount] : moves)
                if (place[name] >= 0) own[static_cast<std::size_t>(place[name])] = amount;
            for (std::size_t j = 0; j < own.size(); ++j) {
                auto const to_quantile = q - (loss - std::exchange(own[j], 0.0));
                auto const expected = [&](double low, double high) {
                    return w * simulation.expected_move(sharp.names[j], indices, low, high);
                };
                auto const at = static_cast<Eigen::Index>(j);
                sharp.tail.add(at, b, expected(to_quantile + hair, infinity));
                sharp.band.add(
                    at, b,
                    expected(to_quantile - half_width - hair, to_quantile + half_width + hair));
            }
        };
        simulation.visit(law, chosen, visit);
    };
    in_blocks(batches.count(), 1, threads, [&](std::size_t from, std::size_t to) {
        for (std::size_t batch = from; batch < to; ++batch) draw(batch);
    });
    for (auto const& [tail, band] : scenarios) {
        sums.tail.scenarios += tail;
        sums.band.scenarios += band;
    }
}

// What a scenario weighs in which a loss of `lift` would carry the book's over the quantile: the
// mean of w, by weight, over the losses from quantile - lift on.
class WeightsBelow {
public:
    WeightsBelow(Simulation::Sample const& sample, double quantile)
        : low_{std::ranges::min(sample.loss)},
          bin_{std::max((quantile - low_) / bins, std::numeric_limits<double>::min())} {
        for (std::size_t s = 0; s < sample.loss.size(); ++s) {
            auto& [sum, squares] = weights_[bin_of(sample.loss[s])];
            double const w = weight(sample, s);
            sum += w;
            squares += w * w;
        }
        for (std::size_t bin = bins; bin > 0; --bin) {
            weights_[bin - 1].sum += weights_[bin].sum;
            weights_[bin - 1].squares += weights_[bin].squares;
        }
    }

    [[nodiscard]] double from(double loss) const {
        auto const& [sum, squares] = weights_[bin_of(loss)];
        return sum > 0.0 ? squares / sum : 1.0;
    }

private:
    static constexpr std::size_t bins = 256;
    struct Sums {
        double sum = 0.0;
        double squares = 0.0;
    };

    [[nodiscard]] std::size_t bin_of(double loss) const {
        return static_cast<std::size_t>(std::clamp((loss - low_) / bin_, 0.0, double{bins}));
    }

    double low_;
    double bin_;
    std::array<Sums, bins + 1> weights_{};
};

// Some names together.
struct Members {
    double base = 0.0;
    double at_quantile = 0.0;
    double slope = 0.0;
    Eigen::ArrayXd tail_moves;  // by batch
    Eigen::ArrayXd band_moves;
};

// The error of their contribution less a share of all; one_more(rate) is the square of what a loss
// not seen does to (members - rate x all).
double error_of(JudgedSums const& sums, Contribution kind, Members const& members, double share,
                std::function<double(double)> const& one_more) {
    auto const& tail = sums.tail;
    auto const& band = sums.band;
    // How the members' part spreads around that of the quantile and its move at `rate`, by batch.
    auto const spread = [&](JudgedSums::Part const& part, Eigen::ArrayXd const& moves,
                            double rate) {
        return Eigen::ArrayXd{moves + (members.base - members.at_quantile) * part.weight -
                              rate * (part.loss - sums.quantile * part.weight)};
    };

    // The band gives the members' part of a loss at the quantile: how it spreads around that part,
    // and how the part moves with the quantile.
    double const slope = members.slope;
    double const band_weight = band.weight.sum();
    Eigen::ArrayXd const off = spread(band, members.band_moves, slope);
    double const band_variance =
        (variance_of_sum(off - off.sum() / band_weight * band.weight) + one_more(slope)) /
        (band_weight * band_weight);
    double const moved = (slope - share) * sums.quantile_error;
    if (kind == Contribution::var) return std::sqrt(band_variance + moved * moved);

    // The shortfall's contribution is a mean over all scenarios of what the tail adds to the part
    // at the quantile, which itself counts for the probability the tail falls short of 1 -
    // confidence.
    double const tail_size = sums.scenarios * (1.0 - sums.confidence);
    double const variance =
        variance_of_sum(spread(tail, members.tail_moves, share)) + one_more(share);
    double const short_of_tail = 1.0 - tail.weight.sum() / tail_size;
    return std::sqrt(variance / (tail_size * tail_size) +
                     short_of_tail * short_of_tail * band_variance);
}

// (sum of w)^2 / (scenarios x sum of w^2) of the losses at or beyond the quantile.
double effective_share_of(Simulation::Sample const& sample, double quantile) {
    double sum = 0.0;
    double squares = 0.0;
    for (std::size_t s = 0; s < sample.loss.size(); ++s) {
        if (sample.loss[s] < quantile) continue;
        double const w = weight(sample, s);
        sum += w;
        squares += w * w;
    }
    return sum * sum / (static_cast<double>(sample.loss.size()) * squares);
}

}  // namespace

double Judgement::contribution_error(Contribution kind, std::span<std::uint32_t const> members,
                                     double share) const {
    Members own;
    own.tail_moves = own.band_moves = Eigen::ArrayXd::Zero(sums.tail.weight.size());
    double unseen = 0.0;
    for (std::uint32_t const i : members) {
        own.base += sums.base[i];
        own.at_quantile += sums.at_quantile[i];
        own.slope += sums.slope[i];
        own.tail_moves += sums.tail.moves.row(i).transpose().array();
        own.band_moves += sums.band.moves.row(i).transpose().array();
        unseen = std::max(unseen, sums.unseen[i]);
    }
    double const others_unseen = members.size() == names.size() ? 0.0 : sums.unseen_max;
    return error_of(sums, kind, own, share, [&](double rate) {
        return std::pow(std::max(std::abs(1.0 - rate) * unseen, std::abs(rate) * others_unseen), 2);
    });
}

Judgement judge(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
                JudgePlan const& plan, unsigned threads) {
    Migration const migration{settings};
    Simulation const simulation{names, settings, migration, plan.seed};
    Batches const batches{plan.scenarios, names.size()};

    Judgement result;
    auto& [totals, measures, sharpened, used, law, effective_share, half_width, band_scale, sums] =
        result;
    used = plan;
    auto const size = static_cast<Eigen::Index>(names.size());
    Eigen::VectorXd expected = Eigen::VectorXd::Zero(size);  // of the loss the simulation draws
    for (std::size_t i = 0; i < names.size(); ++i) {
        measures.push_back(closed_form(*names[i], settings, migration));
        if (names[i]->grade == settings.grades.in_default())
            totals.defaulted_loss += measures[i].expected_loss;
        else
            expected[static_cast<Eigen::Index>(i)] = measures[i].expected_loss;
    }
    totals.expected_loss = expected.sum();

    if (plan.mode == JudgePlan::Mode::shifted)
        law = find_law(simulation, plan, settings.confidence, threads);
    auto const sample = simulation.sample(law, 0, plan.scenarios, threads);
    double const weight_max = law.plain() ? 1.0 : 1.0 / law.shares()[0];

    auto const largest_move = Eigen::VectorXd::Map(simulation.largest().data(), size);
    sums.base = Eigen::VectorXd::Map(simulation.base().data(), size);
    sums.scenarios = static_cast<double>(plan.scenarios);
    sums.confidence = settings.confidence;
    double const base = sums.base.sum();
    Quantile const found =
        quantile(sample, batches, settings.confidence, weight_max, base + largest_move.sum());
    double const q = found.value;
    sums.quantile = totals.loss_quantile = q;
    totals.credit_var = q - totals.expected_loss;
    sums.quantile_error = totals.loss_quantile_error = totals.credit_var_error = found.error;

    // Contributions to the quantile are means over the atom at it, or over a band of losses around
    // it. Where staying has a value too, what counts is the quantile's distance from the loss if
    // nobody moves, or from the expected loss where that is further. What the band's mean loss is
    // off by goes to the names in proportion to their own distance, so that the sum is exact.
    bool const from_base = std::abs(q - base) >= std::abs(totals.credit_var);
    double const distance = from_base ? q - base : totals.credit_var;
    Eigen::VectorXd const& origin = from_base ? sums.base : expected;
    auto const atom = static_cast<std::uint64_t>(std::ranges::count(sample.loss, q));
    half_width =
        plan.resolution.value_or(atom < atom_scenarios_min ? band_share * std::abs(distance) : 0.0);

    Sharp sharp = largest_in_tail(simulation, law, sample, q, plan.sharpened,
                                  settings.loss == LossKind::revaluation);
    draw_sums(sums, sharp, simulation, law, sample, batches, half_width, threads);
    auto const& tail = sums.tail;
    auto const& band = sums.band;
    double const band_weight = band.weight.sum();
    double const tail_weight = tail.weight.sum();
    double const tail_size = sums.scenarios * (1.0 - settings.confidence);
    totals.expected_shortfall = q + (tail.loss.sum() - q * tail_weight) / tail_size;
    if (distance != 0.0) band_scale = distance / (band.loss.sum() / band_weight - (q - distance));

    Eigen::VectorXd const own_distance =
        band_scale * (sums.base + band.moves.rowwise().sum() / band_weight - origin);
    sums.at_quantile = origin + own_distance;
    sums.slope =
        distance != 0.0 ? Eigen::VectorXd{own_distance / distance} : Eigen::VectorXd::Zero(size);
    Eigen::VectorXd const var_contribution = sums.at_quantile - expected;
    Eigen::VectorXd const es_contribution =
        sums.at_quantile +
        (tail.moves.rowwise().sum() + tail_weight * (sums.base - sums.at_quantile)) / tail_size;
    double const rounding = 1e-9 * (std::abs(base) + largest_move.sum());
    ensure(std::abs(var_contribution.sum() - totals.credit_var) <= rounding,
           "contributions do not sum to credit VaR");
    ensure(std::abs(es_contribution.sum() - totals.expected_shortfall) <= rounding,
           "contributions do not sum to expected shortfall");

    effective_share = effective_share_of(sample, q);

    WeightsBelow const weights_below{sample, q};
    sums.unseen =
        largest_move.unaryExpr([&](double lift) { return lift * weights_below.from(q - lift); });
    sums.unseen_max = names.empty() ? 0.0 : sums.unseen.maxCoeff();
    std::vector<std::uint32_t> everyone(names.size());
    std::iota(everyone.begin(), everyone.end(), 0U);
    totals.expected_shortfall_error = result.contribution_error(Contribution::es, everyone, 0.0);
    for (std::uint32_t const i : everyone) {
        std::span const one{&i, 1};
        measures[i].var_contribution = var_contribution[i];
        measures[i].es_contribution = es_contribution[i];
        measures[i].var_contribution_error = result.contribution_error(Contribution::var, one, 0.0);
        measures[i].es_contribution_error = result.contribution_error(Contribution::es, one, 0.0);
    }

    for (std::size_t j = 0; j < sharp.names.size(); ++j) {
        std::uint32_t const i = sharp.names[j];
        auto const at = static_cast<Eigen::Index>(j);
        Members own{.base = sums.base[i],
                    .tail_moves = sharp.tail.sum.row(at).transpose(),
                    .band_moves = sharp.band.sum.row(at).transpose()};
        double const from_origin =
            band_scale * (own.base + own.band_moves.sum() / band_weight - origin[i]);
        own.at_quantile = origin[i] + from_origin;
        if (distance != 0.0) own.slope = from_origin / distance;
        auto const once_more = [at](Sharp::Part const& part) {
            return [most = part.most.row(at).maxCoeff()](double) { return most * most; };
        };
        Sharpened sharper{
            .name = i,
            .var_contribution = own.at_quantile - expected[i],
            .var_contribution_error =
                error_of(sums, Contribution::var, own, 0.0, once_more(sharp.band)),
            .es_contribution =
                own.at_quantile +
                (own.tail_moves.sum() + tail_weight * (own.base - own.at_quantile)) / tail_size,
            .es_contribution_error =
                error_of(sums, Contribution::es, own, 0.0, once_more(sharp.tail))};
        double const band_sum = own.band_moves.sum();
        bool const few = band_sum * band_sum < means_min * variance_of_sum(own.band_moves);
        if (few || measures[i].var_contribution_error < sharper.var_contribution_error) {
            sharper.var_contribution = measures[i].var_contribution;
            sharper.var_contribution_error = measures[i].var_contribution_error;
        }
        sharpened.push_back(sharper);
    }
    return result;
}

}  // namespace model
