#include "daemon/verify.hpp"

#include "daemon/calendar.hpp"
#include "daemon/digest.hpp"
#include "model/verify.hpp"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>
#include <utility>

namespace process {
namespace {

// Updates and a whole pass by one plan are no further apart than this part of the shortfall.
constexpr double as_written = 1e-7;

// How many of the names stand in the tables as they were assessed anew.
model::Check written(Snapshot const& snapshot, model::Book const& book,
                     model::Figures const& figures) {
    double const tolerance = as_written * std::abs(figures.totals.expected_shortfall);
    auto const& names = book.names();
    std::size_t alike = 0;
    for (std::size_t i = 0; i < names.size(); ++i) {
        auto const row = snapshot.es_contribution.find(names[i]->counterparty_id);
        if (row == snapshot.es_contribution.end()) continue;
        double const off = row->second - figures.names[i].es_contribution;
        if (std::abs(off) <= tolerance) ++alike;
    }
    bool const agrees = alike == names.size() && alike == snapshot.es_contribution.size();
    return {.what = "names written as assessed",
            .counterparty_id = {},
            .engine = static_cast<double>(names.size()),
            .judge = static_cast<double>(alike),
            .off = std::nullopt,
            .false_alarm = agrees ? 1.0 : 0.0,
            .agrees = agrees};
}

Rows rows_of(model::Verdict const& verdict) {
    using Kind = Column::Kind;
    Rows rows{{{"what", Kind::text},
               {"counterparty_id", Kind::text},
               {"engine", Kind::figure},
               {"judge", Kind::figure},
               {"difference_in_errors", Kind::figure},
               {"false_alarm", Kind::figure},
               {"agrees", Kind::text}},
              {}};
    for (auto const& check : verdict.checks)
        rows.rows.push_back(
            {check.what, check.counterparty_id.empty() ? std::nullopt : Cell{check.counterparty_id},
             fmt::format("{}", check.engine), fmt::format("{}", check.judge),
             check.off ? Cell{fmt::format("{}", *check.off)} : std::nullopt,
             fmt::format("{}", check.false_alarm), check.agrees ? "yes" : "no"});
    return rows;
}

}  // namespace

Verification verify(Connection& connection, config::Rules const& rules, VerifyPlan const& plan,
                    std::function<void(std::string_view)> const& tell) {
    auto const snapshot = read_snapshot(connection);
    auto const& last = snapshot.last_whole;
    bool const same_model = last && last->model_digest == digest_of(rules.model_files);

    // The same rows are another book at another time: ratings age, rates come into force.
    auto const book_at = [&](model::Time time) {
        model::Book book;
        book.apply(snapshot.inputs, rules.model, {time, day_of(time, rules.service.time_zone)});
        return book;
    };
    auto book = book_at(same_model ? last->as_of : snapshot.taken_at);
    bool const same_book = same_model && hexadecimal(book.digest()) == last->book_digest;
    if (same_model && !same_book) book = book_at(snapshot.taken_at);

    auto const& settings = book.settings();
    std::optional<model::Plan> engine_plan;
    if (same_model)
        if (auto const* const read = std::get_if<model::Plan>(&last->plan)) engine_plan = *read;
    tell(
        fmt::format("assessing {} names by {}", book.names().size(),
                    engine_plan ? "the plan of the last whole assessment" : "a plan of their own"));
    bool const planned = engine_plan.has_value();
    model::Engine engine{rules.service.threads, std::move(engine_plan)};
    auto const figures = engine.assess(book.names(), settings);
    if (!figures.plan_replaced.empty())
        tell(fmt::format("by another plan, since {}", figures.plan_replaced));

    auto const scenarios = plan.scenarios.value_or(settings->simulation.scenarios);
    tell(fmt::format("judging by {} scenarios", scenarios));
    auto const judged = model::judge(book.names(), *settings,
                                     {.scenarios = scenarios,
                                      .seed = plan.seed.value_or(settings->simulation.seed),
                                      .mode = model::JudgePlan::Mode::shifted,
                                      .sharpened = 2 * model::checked_names},
                                     rules.service.threads);
    auto verdict = model::compare(book.names(), *settings, figures, judged);
    // Only the same plan gives the same figures.
    bool const same_figures = same_book && planned && figures.plan_replaced.empty();
    if (same_figures && snapshot.es_contribution_of == last->assessment_id)
        verdict.checks.push_back(written(snapshot, book, figures));

    Verification result{.checks = rows_of(verdict), .agrees = verdict.agrees(), .note = {}};
    auto const newest = read_assessment(connection, std::nullopt);
    if (!last) {
        result.note = "nothing has been assessed yet: the finding is written nowhere";
    } else if (!same_figures || *newest.at(0, "assessment_id") != last->assessment_id) {
        result.note = fmt::format(
            "the {} moved on since the last whole assessment: the finding is written nowhere",
            !same_model                  ? "model"
            : same_book && !same_figures ? "plan"
                                         : "book");
    } else {
        set_health(connection, last->assessment_id,
                   result.agrees ? Health::agrees : Health::differs);
        result.note = fmt::format("written as the health of assessment {}", last->assessment_id);
    }
    return result;
}

}  // namespace process
