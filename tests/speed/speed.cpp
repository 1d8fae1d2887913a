// How fast the engine and the judge are beside the loop a textbook would write (textbook.py), all
// in one run and on one invented lender: time at equal error, growth with the book, changes of one
// name, and how far from what processor and memory could do. The table is markdown.

#include "model/assess.hpp"
#include "model/dependence.hpp"
#include "model/judge.hpp"
#include "model/migration.hpp"
#include "model/simulation.hpp"
#include "tests/support/model_book.hpp"
#include "tests/support/program.hpp"

#include <Eigen/Core>
#include <benchmark/benchmark.h>
#include <fmt/format.h>
#include <sys/resource.h>

#include <algorithm>
#include <array>
#include <chrono>
#include <cmath>
#include <cstdio>
#include <cstring>
#include <fstream>
#include <functional>
#include <iostream>
#include <map>
#include <memory>
#include <numeric>
#include <set>
#include <stdexcept>
#include <thread>
#include <tuple>

namespace {

using Settings = std::shared_ptr<model::Settings const>;
using tests::Names;

constexpr std::size_t book_size = 10'000;
constexpr std::size_t largest_names = 50;
constexpr int passes = 3;
constexpr int batches = 40;
constexpr std::uint64_t plain_scenarios = 60'000;
constexpr std::uint64_t shifted_scenarios = 16'000;

// ---- what is timed
// -------------------------------------------------------------------------------

// Real seconds by benchmark.
std::map<std::string, double> seconds;

class Collecting : public benchmark::ConsoleReporter {
public:
    Collecting() : ConsoleReporter{OO_Tabular} {}
    void ReportRuns(std::vector<Run> const& runs) override {
        for (auto const& run : runs)
            seconds[run.run_name.function_name] =
                run.real_accumulated_time / static_cast<double>(run.iterations);
        ConsoleReporter::ReportRuns(runs);
    }
};

void time_of(std::string const& what, int iterations, std::function<void()> work) {
    benchmark::RegisterBenchmark(what.c_str(),
                                 [work = std::move(work)](benchmark::State& state) {
                                     for (auto _ : state) work();
                                 })
        ->Iterations(iterations)
        ->Unit(benchmark::kMillisecond)
        ->UseRealTime();
}

// The most memory held so far.
double resident_gibibytes() {
    rusage usage{};
    getrusage(RUSAGE_SELF, &usage);
    return static_cast<double>(usage.ru_maxrss) / (1024.0 * 1024.0);
}

// ---- errors
// --------------------------------------------------------------------------------------

// Quantile, shortfall and the contributions of the largest names.
using Answer = Eigen::ArrayXd;

Answer answer(model::Totals const& totals, std::vector<model::NameFigures> const& figures,
              std::vector<model::Sharpened> const& sharpened,
              std::vector<std::uint32_t> const& largest) {
    Answer result(2 + largest_names);
    result[0] = totals.loss_quantile;
    result[1] = totals.expected_shortfall;
    for (std::size_t k = 0; k < largest_names; ++k) {
        auto const sharp = std::ranges::find(sharpened, largest[k], &model::Sharpened::name);
        result[static_cast<Eigen::Index>(2 + k)] =
            sharp != sharpened.end() ? sharp->es_contribution : figures[largest[k]].es_contribution;
    }
    return result;
}

// Relative errors: quantile, shortfall, and the median over the largest names.
using Errors = std::array<double, 3>;

Errors errors(std::vector<Answer> const& answers, Answer const& truth) {
    Eigen::ArrayXd squares = Eigen::ArrayXd::Zero(truth.size());
    for (auto const& one : answers)
        squares += (one / truth - 1.0).square() / static_cast<double>(answers.size());
    Eigen::ArrayXd each = squares.sqrt();
    auto const middle = each.begin() + 2 + largest_names / 2;
    std::nth_element(each.begin() + 2, middle, each.end());
    return {each[0], each[1], *middle};
}

// ---- the textbook loop
// ---------------------------------------------------------------------------

struct Textbook {
    double scenarios = 0.0;
    double seconds = 0.0;
    double mean_loss = 0.0;
};

Textbook textbook(Names const& names, model::Settings const& settings) {
    tests::Folder const folder;
    model::Migration const migration{settings};
    auto const factor = model::factor(settings.indices.correlation);
    std::map<std::string, std::vector<float>> columns;
    for (auto const& name : names) {
        auto const blend = model::blend(settings, name->sector, name->country);
        double const rho = settings.asset_correlation[name->grade.rank];
        Eigen::RowVectorXd const loading =
            std::sqrt(rho) * (blend.first_weight * factor.row(blend.first) +
                              blend.second_weight * factor.row(blend.second));
        for (double const l : loading) columns["loading"].push_back(static_cast<float>(l));
        columns["own"].push_back(static_cast<float>(std::sqrt(1.0 - rho)));
        columns["threshold"].push_back(
            static_cast<float>(migration.thresholds(name->grade).front()));
        columns["loss"].push_back(static_cast<float>(name->loss_at_default));
    }
    for (auto const& [column, values] : columns)
        std::ofstream{folder.path() / column, std::ios::binary}.write(
            reinterpret_cast<char const*>(values.data()),
            static_cast<std::streamsize>(values.size() * sizeof(float)));
    folder.write("shape", fmt::format("{} {}", names.size(), factor.cols()));

    auto const command =
        fmt::format("{}/tests/speed/textbook.py {}", LOADLINE_SOURCE, folder.path().string());
    std::unique_ptr<FILE, int (*)(FILE*)> const pipe{popen(command.c_str(), "r"), pclose};
    Textbook result;
    if (!pipe || std::fscanf(pipe.get(), "%lf %lf %lf", &result.scenarios, &result.seconds,
                             &result.mean_loss) != 3)
        throw std::runtime_error("textbook.py gave no answer");
    return result;
}

// ---- what the machine could do
// -------------------------------------------------------------------

// Multiply-adds of a pass, counted in model/transform.cpp. A cell's probability: a normal
// distribution function (about 30) and the sums over it, for the cumulants and again for the
// contributions. A node: the exponential of the cumulants by three complex products (12), the sum
// over points (2), nine real dot products for the cells' contributions (18). A large name's factor:
// 1 + p (M - 1) and the product with it (6); for its contribution the same factor again (2), the
// quotient by it (9) and its sum (3).
constexpr double work_probability = 80.0;
constexpr double work_node = 32.0;
constexpr double work_large = 20.0;
// The transforms are read for the sum over points, for the cells' and for the large names'
// contributions, of which these stay in cache within a part.
constexpr double reads = 3.0;

// Independent multiply-adds on registers: so many a second, of as many cores as there are.
constexpr std::size_t peak_rounds = 60'000'000;
constexpr std::size_t peak_lanes = 64;
#if defined(__x86_64__)
__attribute__((target_clones("arch=x86-64-v4", "arch=x86-64-v3", "default")))
#endif
double
multiply_adds(std::size_t rounds) {
    using Lane [[gnu::vector_size(64)]] = double;
    Lane sums[peak_lanes / 8] = {};
    Lane const factor = Lane{} + 0.999;
    for (std::size_t round = 0; round < rounds; ++round)
        for (auto& sum : sums) sum = sum * factor + 1.0;
    double total = 0.0;
    for (auto const& sum : sums) total += sum[0];
    return total;
}

void on_all_cores(std::function<void()> const& work) {
    std::vector<std::jthread> threads;
    for (unsigned i = 0; i < std::max(1U, std::thread::hardware_concurrency()); ++i)
        threads.emplace_back(work);
}

// ---- books
// ---------------------------------------------------------------------------------------

template <class Change>
Names changed(Names names, Change const& change) {
    for (std::size_t i = 0; i < names.size(); ++i) {
        model::Name name = *names[i];
        if (change(i, name)) names[i] = std::make_shared<model::Name const>(std::move(name));
    }
    return names;
}

// An engine that has found its plan for a book.
struct Ready {
    Names names;
    Settings settings;
    model::Engine engine{0};
    model::Figures figures;
    Ready(Names book, Settings used)
        : names{std::move(book)}, settings{std::move(used)}, figures{again()} {}
    model::Figures again() { return engine.assess(names, settings); }
};

std::size_t points_of(model::Plan const& plan) {
    std::size_t points = 0;
    for (auto const& component : plan.mixture) points += component.points;
    return points * plan.scramblings;
}

std::string duration(double s) {
    if (s < 0.1) return fmt::format("{:.3g} ms", 1e3 * s);
    if (s < 600.0) return fmt::format("{:.3g} s", s);
    if (s < 172'800.0) return fmt::format("{:.3g} h", s / 3600.0);
    return fmt::format("{:.3g} days", s / 86'400.0);
}

}  // namespace

int main(int argc, char** argv) {
    benchmark::Initialize(&argc, argv);
    Settings const settings = std::make_shared<model::Settings const>(tests::lender_settings());
    auto const names = tests::lender(book_size);
    auto const cores = std::max(1U, std::thread::hardware_concurrency());

    // The engine and the judge on one book.
    Ready ready{names, settings};
    auto const plan = ready.figures.plan;
    auto const exposure = changed(names, [&](std::size_t i, model::Name& name) {
        if (i == 100) name.loss_at_default *= 1.1;
        return i == 100;
    });
    auto const rating = changed(names, [&](std::size_t i, model::Name& name) {
        if (i == 100) name.grade.rank = name.grade.rank == 5 ? 4 : 5;
        return i == 100;
    });
    auto const judge = [&](model::JudgePlan const& asked) {
        return model::judge(names, *settings, asked, 0);
    };
    model::JudgePlan const plain{.scenarios = plain_scenarios};
    model::JudgePlan const shifted{.scenarios = shifted_scenarios,
                                   .mode = model::JudgePlan::Mode::shifted,
                                   .sharpened = 2 * largest_names};
    time_of("first pass", 2, [&] { model::Engine{0}.assess(names, settings); });
    // A new engine each time: on one that knows the book already there is nothing to do.
    time_of("whole pass", 5, [&] { model::Engine{0, plan}.assess(names, settings); });
    bool other = false;
    auto const alternate = [&](Names const& book) {
        return [&] { ready.engine.assess((other = !other) ? book : names, settings); };
    };
    time_of("one exposure", 6, alternate(exposure));
    time_of("one rating", 6, alternate(rating));
    time_of("judge plain", 1, [&] { judge(plain); });
    time_of("judge shifted", 1, [&] { judge(shifted); });
    time_of("multiply-adds", 1,
            [&] { on_all_cores([] { benchmark::DoNotOptimize(multiply_adds(peak_rounds)); }); });
    constexpr std::size_t streamed = std::size_t{1} << 27U;
    std::vector<char> from(streamed, 1);
    std::vector<char> to(streamed);
    time_of("memory", 4, [&] {
        std::memcpy(to.data(), from.data(), streamed);
        benchmark::DoNotOptimize(to.data());
    });
    Collecting reporter;
    reporter.SetOutputStream(&std::cerr);
    reporter.SetErrorStream(&std::cerr);
    benchmark::RunSpecifiedBenchmarks(&reporter);
    auto const loop = textbook(names, *settings);

    // Errors, against a pass on sixteen times the points, with half the window and twice the large
    // names.
    std::vector<std::uint32_t> largest(names.size());
    std::iota(largest.begin(), largest.end(), 0U);
    std::ranges::sort(largest, std::greater{},
                      [&](std::uint32_t i) { return ready.figures.names[i].es_contribution; });
    auto const by_plan = [&](model::Plan const& used) {
        auto const figures = model::Engine{0, used}.assess(names, settings);
        return answer(figures.totals, figures.names, {}, largest);
    };
    auto finer = plan;
    finer.seed += 1'000;
    finer.width /= 2.0;
    finer.nodes *= 2;
    finer.large_from /= 2.0;
    for (auto& component : finer.mixture) component.points *= 8;
    auto const truth = by_plan(finer);
    std::vector<Answer> of_engine;
    std::vector<Answer> of_plain;
    std::vector<Answer> of_shifted;
    for (std::uint64_t seed = 1; seed <= batches; ++seed) {
        auto seeded = plan;
        seeded.seed = seed;
        of_engine.push_back(by_plan(seeded));
        for (auto* const kind : {&plain, &shifted}) {
            auto asked = *kind;
            asked.seed = seed;
            auto const judged = judge(asked);
            (kind == &plain ? of_plain : of_shifted)
                .push_back(answer(judged.totals, judged.names, judged.sharpened, largest));
        }
    }
    Errors const engine_error = errors(of_engine, truth);
    Errors const plain_error = errors(of_plain, truth);
    Errors const shifted_error = errors(of_shifted, truth);

    double const pass = seconds["whole pass"];
    struct Row {
        std::string_view method;
        double seconds;
        double scenarios;  // 0: none
        Errors error;
    };
    Errors loop_error = plain_error;
    for (double& e : loop_error)
        e *= std::sqrt(static_cast<double>(plain_scenarios) / loop.scenarios);
    std::array const rows{
        Row{"engine, plan known", pass, 0.0, engine_error},
        Row{"engine, with planning", seconds["first pass"], 0.0, engine_error},
        Row{"judge, shifted", seconds["judge shifted"], double(shifted_scenarios), shifted_error},
        Row{"judge, plain", seconds["judge plain"], double(plain_scenarios), plain_error},
        Row{"numpy loop, float32", loop.seconds, loop.scenarios, loop_error}};
    fmt::print(
        "{} names, {} cores; errors relative, root mean square of {} batches; "
        "contributions: the median of the {} largest to the shortfall\n\n",
        names.size(), cores, batches, largest_names);
    fmt::print(
        "| | time | scenarios/s | error of quantile | shortfall | contributions "
        "| time at the engine's error: quantile | shortfall | contributions | over the engine |\n"
        "|---|---:|---:|---:|---:|---:|---:|---:|---:|---:|\n");
    for (auto const& row : rows) {
        std::string equal;
        std::string ratio;
        for (std::size_t k = 0; k < row.error.size(); ++k) {
            double const time = row.seconds * std::pow(row.error[k] / engine_error[k], 2);
            equal += fmt::format(" {} |", duration(time));
            ratio += fmt::format("{}{:.3g}", k > 0 ? " / " : "", time / pass);
        }
        fmt::print("| {} | {} | {} | {:.3g}% | {:.3g}% | {:.3g}% |{} {} |\n", row.method,
                   duration(row.seconds),
                   row.scenarios > 0.0 ? fmt::format("{:.3g}", row.scenarios / row.seconds) : "",
                   100.0 * row.error[0], 100.0 * row.error[1], 100.0 * row.error[2], equal, ratio);
    }
    fmt::print("\nMean loss, as a check: closed form {:.5g}, numpy loop {:.5g}.\n\n",
               ready.figures.totals.expected_loss, loop.mean_loss);
    std::fflush(stdout);

    // Growth.
    fmt::print(
        "| names | first pass | plan known | over {} names | resident at most |\n"
        "|---|---:|---:|---:|---:|\n",
        book_size);
    auto const grown = [&](std::string const& what, Names const& book, Settings const& used) {
        auto const timed = [](auto&& work) {
            auto const begin = std::chrono::steady_clock::now();
            work();
            return std::chrono::duration<double>(std::chrono::steady_clock::now() - begin).count();
        };
        model::Engine engine{0};
        double const first = timed([&] { engine.assess(book, used); });
        double const again = timed([&] {
                                 for (int i = 0; i < passes; ++i) engine.assess(book, used);
                             }) /
                             passes;
        fmt::print("| {} | {} | {} | {:.2f} | {:.2f} GiB |\n", what, duration(first),
                   duration(again), again / pass, resident_gibibytes());
        std::fflush(stdout);
    };
    for (std::size_t const size : {1'000U, 10'000U, 100'000U})
        grown(fmt::format("{}", size), tests::lender(size), settings);
    auto million = tests::lender(1'000'000);
    grown("1000000", million, settings);
    grown("1000000, revaluation", million,
          std::make_shared<model::Settings const>(tests::revalued_lender_settings()));
    million = changed(std::move(million), [](std::size_t i, model::Name& name) {
        name.asset_correlation = 0.05 + 0.3 * std::fmod(0.618034 * static_cast<double>(i), 1.0);
        return true;
    });
    grown("1000000, each its own asset correlation", million, settings);

    fmt::print("\n| one name changed, {} names | time | below a whole pass |\n|---|---:|---:|\n",
               book_size);
    for (auto const* what : {"one exposure", "one rating"})
        fmt::print("| {} | {} | {:.3g} |\n", what, duration(seconds[what]), pass / seconds[what]);

    // What a pass does, against what the machine could do.
    std::set<std::tuple<int, std::string, std::string>> cells;
    for (auto const& name : names) cells.emplace(name->grade.rank, name->sector, name->country);
    auto const large = static_cast<double>(std::ranges::count_if(
        names, [&](auto const& name) { return name->loss_at_default >= plan.large_from; }));
    auto const points = static_cast<double>(points_of(plan));
    double const probabilities = static_cast<double>(cells.size()) * points;
    double const nodes = points * plan.nodes;
    double const work = work_probability * probabilities + (work_node + work_large * large) * nodes;
    double const peak =
        static_cast<double>(cores * peak_rounds * peak_lanes) / seconds["multiply-adds"];
    double const bandwidth = 2.0 * static_cast<double>(streamed) / seconds["memory"];
    double const bytes = 16.0 * nodes;
    fmt::print(
        "\nA pass over {0} points and {1} nodes is {2:.3g} multiply-adds: {3:.0f} for each of "
        "{4:.3g} "
        "conditional probabilities ({5} cells x points), {6:.0f} for each of {7:.3g} (point, node) "
        "pairs and {8:.0f} more for each of its {9} large names there. {10} cores can do {11:.3g} "
        "a "
        "second: {12:.0f}% of a pass. The transforms are {13:.3g} MB; written once and read "
        "{14:.0f} "
        "times at {15:.3g} GB/s they are {16:.1f}% of a pass.\n",
        points, plan.nodes, work, work_probability, probabilities, cells.size(), work_node, nodes,
        work_large, large, cores, peak, 100.0 * work / peak / pass, bytes / 1e6, reads,
        bandwidth / 1e9, 100.0 * (1.0 + reads) * bytes / bandwidth / pass);
}
