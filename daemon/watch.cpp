#include "daemon/watch.hpp"

#include "daemon/calendar.hpp"
#include "daemon/digest.hpp"
#include "daemon/print.hpp"
#include "daemon/schema.hpp"

#include <fmt/format.h>
#include <poll.h>
#include <spdlog/spdlog.h>
#include <sys/eventfd.h>
#include <unistd.h>

#include <algorithm>
#include <array>
#include <iterator>
#include <limits>
#include <system_error>
#include <thread>

namespace process {
namespace {

using namespace std::chrono_literals;
using alerts::word;

constexpr auto first_wait = 100ms;
constexpr auto longest_wait = 5000ms;
constexpr int retries_at_most = 10;

// Touched turns go first while changes keep coming: a whole one waits until none has come for a
// moment, but never longer than the bound.
constexpr auto settled_after = 50ms;
constexpr auto whole_put_off_at_most = 1000ms;

RulesDigests digests_of(config::Rules const& rules) {
    return {digest_of(rules.service_files), digest_of(rules.model_files),
            digest_of(rules.limits_files)};
}

// A value inside quotes on a line of the log.
std::string in_log(std::string_view text) {
    std::string line;
    for (char const c : visible(text)) {
        if (c == '"') line += '\\';
        line += c;
    }
    return line;
}

bool is_an_excess(alerts::Event event) {
    using alerts::Event;
    return event == Event::opened || event == Event::waived || event == Event::raised ||
           event == Event::worse || event == Event::waiver_exceeded;
}

bool is_explained_by_the_book(alerts::Event event) {
    using alerts::Event;
    return is_an_excess(event) || event == Event::eased || event == Event::cured;
}

// The closed forms of a book that differs from another by some names; contributions stay as they
// were.
std::vector<model::NameFigures> touched_figures(alerts::Stage const& before,
                                                model::Book const& book) {
    constexpr double unknown = std::numeric_limits<double>::quiet_NaN();
    model::Migration const migration{*book.settings()};
    auto const& old_names = before.book.names();
    auto const& names = book.names();
    std::vector<model::NameFigures> figures;
    figures.reserve(names.size());
    alerts::each_pair(old_names, names, [&](auto o, auto n) {
        if (!n) return;
        if (o && old_names[*o] == names[*n]) {
            figures.push_back(before.figures[*o]);
            return;
        }
        auto own = model::closed_form(*names[*n], *book.settings(), migration);
        auto const of = [&](double model::NameFigures::*figure) {
            own.*figure = o ? before.figures[*o].*figure : unknown;
        };
        of(&model::NameFigures::var_contribution);
        of(&model::NameFigures::var_contribution_error);
        of(&model::NameFigures::es_contribution);
        of(&model::NameFigures::es_contribution_error);
        figures.push_back(own);
    });
    return figures;
}

// The totals that are sums of the names' own.
model::Totals own_totals(alerts::View const& view) {
    model::Totals totals;
    totals.expected_loss = view.total(alerts::Measure::expected_loss);
    totals.defaulted_loss = view.defaulted_loss();
    return totals;
}

// The outcomes with their explanations: book against book, or found at the start. A contribution
// is explained since the last whole turn, all else since the last one.
std::vector<ExplainedOutcome> explained(std::vector<alerts::Outcome> const& outcomes,
                                        std::optional<alerts::Stage> const& last,
                                        std::optional<alerts::Stage> const& whole,
                                        alerts::Stage const& now,
                                        alerts::Checks const& checks_before,
                                        alerts::Checks const& checks) {
    struct Asked {
        std::vector<std::size_t> outcomes;
        std::vector<std::pair<alerts::SubjectKey, alerts::Severity>> subjects;
    };
    Asked of_contributions;
    Asked of_others;
    std::vector<ExplainedOutcome> all;
    for (auto const& outcome : outcomes) {
        bool const ask = std::ranges::any_of(outcome.moves, [](alerts::Move const& move) {
            return is_explained_by_the_book(move.transition->event);
        });
        auto const& alert = outcome.alert;
        if (ask) {
            auto& asked = alerts::is_contribution(alert.measure) ? of_contributions : of_others;
            asked.outcomes.push_back(all.size());
            asked.subjects.emplace_back(alert.key, alert.severity);
        }
        all.push_back({outcome, std::nullopt});
    }
    auto const explain = [&](Asked const& asked, std::optional<alerts::Stage> const& before) {
        if (!before) {
            for (auto const i : asked.outcomes)
                if (auto const* const usage = checks.find(all[i].outcome.alert.key))
                    all[i].explanation = alerts::explain_at_start(&checks_before, *usage,
                                                                  all[i].outcome.alert.severity);
            return;
        }
        auto explanations = alerts::explain(*before, now, asked.subjects);
        for (std::size_t i = 0; i < explanations.size(); ++i)
            all[asked.outcomes[i]].explanation = std::move(explanations[i]);
    };
    explain(of_contributions, whole);
    explain(of_others, last);
    for (auto& [outcome, explanation] : all) {
        // Whose act an easing is says nothing about whose act the excess was.
        if (explanation && !std::ranges::any_of(outcome.moves, [](alerts::Move const& move) {
                return is_an_excess(move.transition->event);
            }))
            explanation->nature.reset();
        if (outcome.alert.state == alerts::State::cured) {
            auto const part = explanation ? explanation->cause.largest() : std::nullopt;
            outcome.alert.end_reason =
                word(alerts::part_words, part.value_or(alerts::Part::portfolio));
        }
    }
    return all;
}

std::string_view called(alerts::SubjectKey const& key, model::Book const& book) {
    if (key.kind == alerts::SubjectKind::name)
        if (auto const* const name = book.find(key.subject)) return name->legal_name;
    if (key.kind == alerts::SubjectKind::connected_group)
        if (auto const group = book.shared().group_names.find(key.subject);
            group != book.shared().group_names.end())
            return group->second;
    return {};
}

// Returns how many there are.
std::size_t log_moves(std::span<ExplainedOutcome const> outcomes, model::Book const& book) {
    std::size_t moves = 0;
    for (auto const& [outcome, explanation] : outcomes) {
        moves += outcome.moves.size();
        for (auto const& move : outcome.moves)
            spdlog::info(
                "event={} limit={} subject_kind={} subject=\"{}\" from={} to={} severity={} "
                "reason=\"{}\" text=\"{}\"",
                word(alerts::event_words, move.transition->event), outcome.alert.key.limit_id,
                word(alerts::subject_kind_words, outcome.alert.key.kind),
                in_log(outcome.alert.key.subject), word(alerts::state_words, move.from),
                word(alerts::state_words, move.to), word(alerts::severity_words, move.severity),
                move.transition->reason,
                in_log(sentence(outcome.alert, called(outcome.alert.key, book),
                                explanation ? explanation->cause : alerts::Cause{},
                                explanation ? explanation->nature : std::nullopt,
                                book.settings()->base_currency)));
    }
    return moves;
}

// Each once, when it begins.
void log_unmeasured(alerts::Checks const& checks, alerts::Checks const& before) {
    std::vector<alerts::Unmeasured> begun;
    std::ranges::set_difference(checks.unmeasured, before.unmeasured, std::back_inserter(begun), {},
                                &alerts::Unmeasured::key, &alerts::Unmeasured::key);
    for (auto const& row : begun)
        spdlog::info(R"(event=unmeasured limit={} subject_kind={} subject="{}" reason="{}")",
                     row.key.limit_id, word(alerts::subject_kind_words, row.key.kind),
                     in_log(row.key.subject), row.reason);
}

}  // namespace

Wake::Wake() : descriptor_{::eventfd(0, EFD_CLOEXEC | EFD_NONBLOCK)} {
    if (descriptor_ < 0) throw std::system_error(errno, std::generic_category(), "eventfd");
}
Wake::~Wake() {
    ::close(descriptor_);
}
void Wake::ring() const {
    ::eventfd_write(descriptor_, 1);
}
void Wake::quiet() const {
    eventfd_t count = 0;
    ::eventfd_read(descriptor_, &count);
}

Watch::Watch(config::Rules rules, std::filesystem::path folder)
    : folder_{std::move(folder)}, rules_{std::move(rules)}, digests_{digests_of(rules_)} {}

void Watch::request_reload() {
    reload_requested_ = true;
    wake_.ring();
}

void Watch::run(std::stop_token stop) {
    auto pause = std::chrono::milliseconds{first_wait};
    bool worked_once = false;
    while (!stop.stop_requested()) {
        try {
            if (!tables_) connect(stop);
            if (!tables_) break;  // asked to stop while it waited for the lock
            if (!known_) turn({Trigger::start, Scope::whole});
            worked_once = true;
            pause = first_wait;
            while (auto const ask = wait_for_change(stop)) turn(*ask);
        } catch (DatabaseError const& error) {
            forget();
            auto const trouble = error.trouble();
            bool const passes = trouble == Trouble::lost || trouble == Trouble::busy ||
                                trouble == Trouble::retry ||
                                (trouble == Trouble::denied && worked_once);
            if (!passes) throw;
            tables_.reset();
            hints_.reset();
            spdlog::warn("event=database_trouble sqlstate={} wait_ms={} text=\"{}\"",
                         error.sqlstate(), pause.count(), in_log(error.what()));
            wait(pause);
            pause = std::min<std::chrono::milliseconds>(2 * pause, longest_wait);
        }
    }
    spdlog::info("event=stopped");
}

bool Watch::pass_once(std::optional<std::int64_t> seed) {
    if (seed) {
        auto settings = *rules_.model;
        settings.simulation.seed = static_cast<std::uint64_t>(*seed);
        rules_.model = std::make_shared<model::Settings const>(std::move(settings));
    }
    Connection writer{rules_.service.database, "assess", "loadline_engine"};
    if (auto const problems = schema_problems(writer); !problems.empty())
        throw DatabaseError{Trouble::usage, "55000", problems.front()};
    if (!writer.try_writer_lock()) return false;
    tables_ = std::make_unique<Tables>(std::move(writer));
    turn({Trigger::command, Scope::whole});
    return true;
}

// One path for start and reconnect: schema, hints, lock; the first turn then reads everything.
void Watch::connect(std::stop_token const& stop) {
    Connection writer{rules_.service.database, "serve", "loadline_engine"};
    if (auto const problems = schema_problems(writer); !problems.empty())
        throw DatabaseError{Trouble::usage, "55000", problems.front()};
    hints_ = std::make_unique<Connection>(rules_.service.database, "hints", "loadline_engine");
    hints_->listen_for_changes();
    if (take_lock(stop, writer)) tables_ = std::make_unique<Tables>(std::move(writer));
}

bool Watch::take_lock(std::stop_token const& stop, Connection& writer) {
    bool said = false;
    while (!stop.stop_requested()) {
        if (writer.try_writer_lock()) return true;
        if (!said) spdlog::info("event=standby text=\"another process is the writer; waiting\"");
        said = true;
        wait(1s);
    }
    return false;
}

std::optional<Watch::Ask> Watch::wait_for_change(std::stop_token const& stop) {
    bool hinted = false;
    while (!stop.stop_requested()) {
        if (reload_requested_.exchange(false) && reload())
            return Ask{Trigger::reload, Scope::whole};
        auto const now = Clock::now();
        if (owed_ && now >= owed_->first + whole_put_off_at_most)
            return Ask{Trigger::change, Scope::whole};
        if (hinted) return Ask{Trigger::change, Scope::touched};
        auto const waiting = tables_->waiting();
        if (waiting.changes) return Ask{Trigger::change, Scope::touched};
        if (waiting.due || now >= due_) return Ask{Trigger::time, Scope::whole};
        auto next = std::min(due_, now + rules_.service.poll);
        if (owed_) {
            auto const settled = owed_->last + settled_after;
            if (now >= settled) return Ask{Trigger::change, Scope::whole};
            next = std::min(next, settled);
        }
        hinted = wait(std::chrono::ceil<std::chrono::milliseconds>(next - now));
    }
    return std::nullopt;
}

// Until a hint, a wake or the time is up; whether it was a hint.
bool Watch::wait(std::chrono::milliseconds at_most) {
    std::array<pollfd, 2> sockets{pollfd{wake_.descriptor(), POLLIN, 0}, pollfd{-1, POLLIN, 0}};
    if (hints_) sockets[1].fd = hints_->socket();
    ::poll(sockets.data(), sockets.size(), static_cast<int>(at_most.count()));
    wake_.quiet();
    if (sockets[1].revents != 0) hints_->drain_hints();
    return sockets[1].revents != 0;
}

bool Watch::reload() {
    auto loaded = config::load(folder_);
    if (auto const* const faults = std::get_if<std::vector<config::Fault>>(&loaded)) {
        for (auto const& fault : *faults)
            spdlog::error("event=config_fault text=\"{}\"", in_log(fault.text()));
        spdlog::error("event=config_refused faults={} text=\"the files in force go on ruling\"",
                      faults->size());
        return false;
    }
    adopt(std::get<config::Rules>(std::move(loaded)));
    return true;
}

void Watch::adopt(config::Rules rules) {
    if (rules.service != rules_.service)
        spdlog::warn("event=config_later text=\"service.yaml rules from the next start on\"");
    rules.service = rules_.service;
    rules.service_files = rules_.service_files;
    auto const digests = digests_of(rules);
    // The same model is the same object, so that nothing is derived or explained anew for it.
    if (digests.model == digests_.model) rules.model = rules_.model;
    rules_ = std::move(rules);
    digests_ = digests;
    spdlog::info("event=config_adopted limits_digest={} model_digest={}", digests_.limits,
                 digests_.model);
}

void Watch::forget() {
    known_.reset();
    next_.reset();
    owed_.reset();
}

// A turn that lost a race is tried again on the book as it was: its transaction is surely undone.
// Any other end without a commit throws the book away.
void Watch::turn(Ask ask) {
    for (int retries = 0;; ++retries) {
        try {
            auto turn = tables_->begin();
            decide(turn, ask);
            return;
        } catch (DatabaseError const& error) {
            if (error.trouble() != Trouble::retry || retries == retries_at_most) {
                forget();
                throw;
            }
            spdlog::info("event=turn_retried sqlstate={} text=\"{}\"", error.sqlstate(),
                         in_log(error.what()));
            std::this_thread::sleep_for(first_wait);
        } catch (...) {
            forget();
            throw;
        }
    }
}

// The whole book's figures, by the plan that served the model last.
std::shared_ptr<model::Figures const> Watch::assess(Turn& turn, model::Book const& book) {
    auto const& settings = book.settings();
    auto const seed = settings->simulation.seed;
    if (!engine_ || engine_model_ != settings) {
        std::optional<model::Plan> plan;
        if (auto const last = turn.last_whole(digests_.model, seed)) {
            if (auto const* const read = std::get_if<model::Plan>(&last->plan)) plan = *read;
            if (auto const* const fault = std::get_if<std::string>(&last->plan))
                spdlog::warn(R"(event=plan_ignored reason="{}")", in_log(*fault));
        }
        engine_.emplace(rules_.service.threads, std::move(plan));
        engine_model_ = settings;
    }
    auto figures = std::make_shared<model::Figures>(engine_->assess(book.names(), settings));
    if (!figures->plan_replaced.empty()) {
        auto const last = turn.last_whole(digests_.model, seed).value_or(LastWhole{});
        spdlog::info(R"(event=plan_replaced reason="{}" loss_quantile_before={} loss_quantile={} )"
                     "expected_shortfall_before={} expected_shortfall={}",
                     in_log(figures->plan_replaced), last.loss_quantile,
                     figures->totals.loss_quantile, last.expected_shortfall,
                     figures->totals.expected_shortfall);
    }
    return figures;
}

// The book after the changes with its figures.
std::shared_ptr<Watch::State> Watch::see(Turn& turn, model::Book::Changes changes,
                                         model::Instant as_of, bool whole) {
    auto state = next_ ? std::move(next_) : std::make_shared<State>();
    if (known_ && !state->book.settings()) state->book = known_->last->book;
    state->moved = state->book.apply(std::move(changes), rules_.model, as_of);
    state->limits = rules_.limits;
    if (whole) {
        bool const assessed = known_ && !state->moved && known_->last == known_->whole;
        state->whole = assessed ? known_->whole->whole : assess(turn, state->book);
        state->figures = state->whole->names;
    } else {
        state->figures = touched_figures(known_->last->stage(), state->book);
    }
    auto const* const before = known_ ? &*known_->last->view : nullptr;
    state->view.emplace(alerts::view_of(state->stage(), state->whole.get(), before));
    return state;
}

// From the changes to the alert rows; what a commit has made true becomes known.
void Watch::decide(Turn& turn, Ask ask) {
    auto const began = Clock::now();
    auto changes = turn.changes(!known_);
    if (ask.scope == Scope::touched && changes.consumed == 0) return;  // the hint came late
    auto const& zone = rules_.service.time_zone;
    model::Instant const as_of{turn.as_of(), day_of(turn.as_of(), zone)};
    auto const trigger =
        changes.requested && ask.trigger == Trigger::change ? Trigger::command : ask.trigger;
    bool const whole = !known_ || ask.scope == Scope::whole || changes.requested ||
                       changes.inputs.whole || changes.inputs.shared ||
                       as_of.day != known_->last->book.as_of().day;
    std::optional<alerts::Stage> last_stage;
    std::optional<alerts::Stage> whole_stage;
    if (known_) {
        last_stage.emplace(known_->last->stage());
        whole_stage.emplace(known_->whole->stage());
    }
    auto const state = see(turn, std::move(changes.inputs), as_of, whole);
    auto const now = state->stage();
    auto const& view = *state->view;
    alerts::Reach const reach = whole ? alerts::Reach{*state->limits}
                                      : alerts::Reach{*state->limits, *known_->last->view, view};
    auto const seen = view.check(reach);
    auto const checks_before = known_ ? alerts::Checks{} : turn.usage();
    auto const& before = known_ ? known_->checks : checks_before;
    auto differences = known_ ? before.differences(seen, reach)
                              : alerts::Differences{.written = seen.usages, .gone = {}};

    auto const rules_before =
        known_ ? std::optional{known_->rules} : turn.rules_of_last_assessment();
    auto const outcomes =
        alerts::advance({.alerts = turn.live_alerts(reach),
                         .checks = seen,
                         .checks_before = &before,
                         .limits = *state->limits,
                         .limits_changed = rules_before && rules_before->limits != digests_.limits,
                         .as_of = as_of});
    auto const written = explained(outcomes, last_stage, whole_stage, now, before, seen);

    if (!known_ || known_->rules != digests_) turn.write_rules(rules_, digests_);
    turn.write({.assessment_id = new_assessment_id(),
                .trigger = trigger,
                .scope = whole ? Scope::whole : Scope::touched,
                .totals = whole ? state->whole->totals : own_totals(view),
                .plan = whole ? &state->whole->plan : nullptr,
                .rules = digests_},
               last_stage ? &*last_stage : nullptr, now, differences, written);
    turn.commit();

    log_unmeasured(seen, before);
    auto const moves = log_moves(written, state->book);
    spdlog::info("event=assessed scope={} trigger={} changes={} names={} usages={} moved={}",
                 word(scope_words, whole ? Scope::whole : Scope::touched),
                 word(trigger_words, trigger), changes.consumed, state->book.names().size(),
                 seen.usages.size(), moves);

    if (!known_) known_.emplace();
    known_->checks.take(seen, reach, std::move(differences));
    known_->last = state;
    known_->rules = digests_;
    if (whole) {
        known_->whole = state;
        owed_.reset();
    } else if (state->moved) {
        auto const first = owed_ ? owed_->first : Clock::now();
        owed_ = Owed{.first = first, .last = Clock::now()};
    }
    next_ = std::make_shared<State>();
    next_->book = state->book;
    auto next_due = start_of(as_of.day + std::chrono::days{1}, zone);
    if (auto const rating = state->book.due()) next_due = std::min(next_due, *rating);
    due_ = began + (next_due - as_of.at);
}

}  // namespace process
