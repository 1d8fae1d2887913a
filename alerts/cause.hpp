#pragma once

#include "alerts/life.hpp"
#include "model/assess.hpp"

#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <utility>
#include <vector>

// Why an alert moved, whose act it was, and the sentence that tells the desk.

namespace alerts {

enum class Part {
    exchange_rate,
    collateral,
    exposure,
    rating,
    model,
    capital,
    limit,
    portfolio,
    found_at_start
};

inline constexpr std::pair<Part, std::string_view> part_words[] = {
    {Part::exchange_rate, "exchange_rate"},
    {Part::collateral, "collateral"},
    {Part::exposure, "exposure"},
    {Part::rating, "rating"},
    {Part::model, "model"},
    {Part::capital, "capital"},
    {Part::limit, "limit"},
    {Part::portfolio, "portfolio"},
    {Part::found_at_start, "found_at_start"}};

// Observed against the level of the alert's severity. Without a level there is no excess.
struct Position {
    double observed = 0.0;
    std::optional<double> level;
    [[nodiscard]] double excess() const { return level ? observed - *level : 0.0; }
};

// The parts sum to after.excess() - before.excess(); parts of 0 are left out.
struct Cause {
    Position before;
    Position after;
    std::vector<std::pair<Part, double>> parts;

    // The part that drove the change the most in its own direction.
    [[nodiscard]] std::optional<Part> largest() const;
};

struct Explanation {
    Cause cause;
    std::optional<Nature> nature;  // null where there was no book before
};

// One side of a turn.
struct Stage {
    model::Book const& book;
    std::span<model::NameFigures const> figures;  // as book.names()
    Limits const& limits;
    View const* view = nullptr;  // of all this, where it is made already
};

// A stage as limits see it; the rest as View's.
View view_of(Stage const& stage, model::Figures const* errors = nullptr,
             View const* before = nullptr);

// Walks from the book before to the book after, one kind of input at a time: exchange rates, then
// collateral, exposures, ratings, the model's rules, capital, limits; what is left is the rest of
// the portfolio. Each step's change in observed - level is that part, so parts add up.
//
// Contributions cannot be simulated at every step. Until its grade moves, a name's contribution
// goes with its loss at default, to first order; a name whose grade moved takes its new
// contribution with the rating, and what the others' moves did to it is the portfolio's part.
//
// Nature: active when, with the firm's own acts of the turn taken out (a new deal, a raised
// commitment, a drawing not already committed, released collateral), it would be inside.
std::vector<Explanation> explain(Stage before, Stage after,
                                 std::span<std::pair<SubjectKey, Severity> const> subjects);

// The explanation where there is no book before: one part.
Explanation explain_at_start(Checks const* before, Usage const& after, Severity severity);

// Few digits for a reader; exact figures are in the tables. "12.4 m"; with its unit "EUR 12.4 m",
// "2.5%", "0.0213". `more` digits where two figures would look alike.
std::string scaled(double value, int more = 0);
std::string readable(double value, Unit unit, std::string_view currency, int more = 0);

// One sentence: who, what, over which level, since what, and whose act it was.
std::string sentence(Alert const& alert, std::string_view subject_name, Cause const& cause,
                     std::optional<Nature> nature, std::string_view currency);

}  // namespace alerts
