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
#include <system_error>
#include <thread>

namespace process {
namespace {

using namespace std::chrono_literals;
using alerts::word;

constexpr auto first_wait = 100ms;
constexpr auto longest_wait = 5000ms;
constexpr int retries_at_most = 10;

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

// The outcomes with their explanations: book against book, or found at the start.
std::vector<ExplainedOutcome> explained(std::vector<alerts::Outcome> outcomes,
                                        std::optional<alerts::Stage> const& before,
                                        alerts::Stage const& after,
                                        alerts::Checks const& checks_before,
                                        alerts::Checks const& checks) {
    std::vector<ExplainedOutcome> all;
    std::vector<std::size_t> asked;
    std::vector<std::pair<alerts::SubjectKey, alerts::Severity>> subjects;
    for (auto& outcome : outcomes) {
        bool const ask = std::ranges::any_of(outcome.moves, [](alerts::Move const& move) {
            return is_explained_by_the_book(move.transition->event);
        });
        if (ask) {
            asked.push_back(all.size());
            subjects.emplace_back(outcome.alert.key, outcome.alert.severity);
        }
        all.push_back({std::move(outcome), std::nullopt});
    }
    if (before) {
        auto explanations = alerts::explain(*before, after, subjects);
        for (std::size_t i = 0; i < asked.size(); ++i)
            all[asked[i]].explanation = std::move(explanations[i]);
    } else {
        for (auto const i : asked)
            if (auto const* const usage = checks.find(all[i].outcome.alert.key))
                all[i].explanation =
                    alerts::explain_at_start(&checks_before, *usage, all[i].outcome.alert.severity);
    }
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
            if (!known_) turn(Trigger::start);
            worked_once = true;
            pause = first_wait;
            while (auto const trigger = wait_for_change(stop)) turn(*trigger);
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
    turn(Trigger::command);
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

std::optional<Trigger> Watch::wait_for_change(std::stop_token const& stop) {
    while (!stop.stop_requested()) {
        if (reload_requested_.exchange(false) && reload()) return Trigger::reload;
        if (tables_->anything_to_do()) return Trigger::change;
        auto const left =
            std::chrono::ceil<std::chrono::milliseconds>(due_ - std::chrono::steady_clock::now());
        if (left <= 0ms) return Trigger::time;
        wait(std::min(left, rules_.service.poll));
    }
    return std::nullopt;
}

// Until a hint, a wake or the time is up.
void Watch::wait(std::chrono::milliseconds at_most) {
    std::array<pollfd, 2> sockets{pollfd{wake_.descriptor(), POLLIN, 0}, pollfd{-1, POLLIN, 0}};
    if (hints_) sockets[1].fd = hints_->socket();
    ::poll(sockets.data(), sockets.size(), static_cast<int>(at_most.count()));
    wake_.quiet();
    if (sockets[1].revents != 0) hints_->drain_hints();
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
}

// A turn that lost a race is tried again on the book as it was: its transaction is surely undone.
// Any other end without a commit throws the book away.
void Watch::turn(Trigger trigger) {
    auto const& zone = rules_.service.time_zone;
    for (int retries = 0;; ++retries) {
        try {
            auto turn = tables_->begin();
            auto const began = std::chrono::steady_clock::now();
            model::Instant const as_of{turn.as_of(), day_of(turn.as_of(), zone)};
            decide(turn, trigger, as_of);
            auto next = start_of(as_of.day + std::chrono::days{1}, zone);
            if (auto const rating = known_->book.due()) next = std::min(next, *rating);
            due_ = began + (next - as_of.at);
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

// From the changes to the alert rows; what a commit has made true becomes known.
void Watch::decide(Turn& turn, Trigger trigger, model::Instant as_of) {
    auto changes = turn.changes(!known_);
    if (trigger == Trigger::change) {
        trigger = changes.requested      ? Trigger::command
                  : changes.consumed > 0 ? Trigger::change
                                         : Trigger::time;
    }
    Known now = known_.value_or(Known{});
    bool const different =
        now.book.apply(std::move(changes.inputs), rules_.model, as_of) || !now.figures;
    if (different)
        now.figures =
            std::make_shared<model::Figures const>(model::assess(now.book, rules_.service.threads));
    now.limits = rules_.limits;
    now.rules = digests_;
    auto const checks_before = known_ ? known_->checks : turn.usage();
    auto const rules_before =
        known_ ? std::optional{known_->rules} : turn.rules_of_last_assessment();
    now.checks = alerts::check(now.book, *now.figures, *now.limits);

    auto const live = turn.live_alerts();
    auto outcomes =
        alerts::advance({.alerts = live,
                         .checks = now.checks,
                         .checks_before = &checks_before,
                         .limits = *now.limits,
                         .limits_changed = rules_before && rules_before->limits != digests_.limits,
                         .as_of = as_of});
    std::optional<alerts::Stage> before;
    if (known_) before.emplace(alerts::Stage{known_->book, *known_->figures, *known_->limits});
    auto const written =
        explained(std::move(outcomes), before, {now.book, *now.figures, *now.limits}, checks_before,
                  now.checks);

    if (!known_ || known_->rules != digests_) turn.write_rules(rules_, digests_);
    turn.write({.assessment_id = new_assessment_id(),
                .trigger = trigger,
                .names = now.book.names().size(),
                .book_digest = hexadecimal(now.book.digest()),
                .rules = digests_},
               now.book, *now.figures, now.checks, written);
    turn.commit();

    log_unmeasured(now.checks, known_ ? known_->checks : alerts::Checks{});
    auto const moves = log_moves(written, now.book);
    spdlog::info("event=assessed trigger={} changes={} names={} usages={} moved={}",
                 word(trigger_words, trigger), changes.consumed, now.book.names().size(),
                 now.checks.usages.size(), moves);
    known_ = std::move(now);
}

}  // namespace process
