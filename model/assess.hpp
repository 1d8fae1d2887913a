#pragma once

#include "model/figures.hpp"
#include "model/inversion.hpp"
#include "model/plan.hpp"

#include <cstddef>
#include <cstdint>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <vector>

namespace model {

struct Figures {
    Totals totals;
    std::vector<NameFigures> names;  // as Book::names()
    LossCurve curve;                 // of the names not in default
    Plan plan;                       // the one they were reached by
    std::string plan_replaced;       // why it is not the one asked for; empty: it is

    // By how much the contributions missed their sums before each took its part of that, as a
    // fraction of the sum.
    double var_residual = 0.0;
    double es_residual = 0.0;

    // One standard error of
    //
    //     (sum of the members' contributions) - share x (sum of all names' contributions)
    //
    // members: indices into `names`, each at most once. Base currency.
    [[nodiscard]] double contribution_error(Contribution kind,
                                            std::span<std::uint32_t const> members,
                                            double share) const;

    // Names x sources: how much each independent source of error moves a name's contribution, one
    // standard error each. What a source does to a set is the sum of what it does to the members.
    struct Spread {
        std::size_t sources = 0;
        std::vector<float> of;
        std::vector<double> of_all;
    };
    Spread var_spread;
    Spread es_spread;
};

// The figures of books, one after the other: what the last one left is kept, so that a book that
// differs from it by a few names costs a fraction of a whole pass. The figures depend on book and
// plan alone: to the last bit after a whole pass, to 1e-9 after updates.
class Engine {
public:
    // `threads` 0: all cores. Without a plan, one is found for the first book.
    explicit Engine(unsigned threads, std::optional<Plan> plan = std::nullopt);
    ~Engine();
    Engine(Engine&&) noexcept;
    Engine& operator=(Engine&&) noexcept;

    // `names` by counterparty_id, as Book::names().
    Figures assess(std::span<std::shared_ptr<Name const> const> names,
                   std::shared_ptr<Settings const> const& settings);

private:
    struct State;
    std::unique_ptr<State> state_;
};

// One book, once.
Figures assess(std::span<std::shared_ptr<Name const> const> names, Settings const& settings,
               unsigned threads);

}  // namespace model
