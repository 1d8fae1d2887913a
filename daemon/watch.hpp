#pragma once

#include "config/load.hpp"
#include "daemon/tables.hpp"

#include <atomic>
#include <chrono>
#include <filesystem>
#include <memory>
#include <optional>
#include <stop_token>

// The loop: from committed changes to alert rows.

namespace process {

// Wakes a thread that waits on file descriptors.
class Wake {
public:
    Wake();
    ~Wake();
    Wake(Wake const&) = delete;
    Wake& operator=(Wake const&) = delete;
    void ring() const;
    void quiet() const;
    [[nodiscard]] int descriptor() const { return descriptor_; }

private:
    int descriptor_;
};

class Watch {
public:
    Watch(config::Rules rules, std::filesystem::path folder);

    // Assesses the whole book, then whatever changes, until asked to stop. Trouble of the outside
    // world is waited out; a mistake of ours is thrown.
    void run(std::stop_token stop);

    // One whole pass with the lock held, and no more. `seed` replaces model.yaml's. Nothing when
    // another process holds the writer's lock.
    bool pass_once(std::optional<std::int64_t> seed);

    // From another thread: read the files again, and look up from any wait.
    void request_reload();
    void wake() const { wake_.ring(); }

private:
    using Clock = std::chrono::steady_clock;

    // What asks for a turn, and how much of one will do.
    struct Ask {
        Trigger trigger;
        Scope scope;
    };

    // A book with the figures of its names and the limits that held them. Contributions are those
    // of the last whole turn; NaN for a name that none has seen. Once made it stays as it is.
    struct State {
        model::Book book;
        std::vector<model::NameFigures> figures;
        std::shared_ptr<alerts::Limits const> limits;
        std::shared_ptr<model::Figures const> whole;  // the pass; null after a touched turn
        std::optional<alerts::View> view;             // of all this
        bool moved = false;                           // from the one before
        [[nodiscard]] alerts::Stage stage() const {
            return {book, figures, *limits, view ? &*view : nullptr};
        }
    };

    // What the last committed turn left behind.
    struct Known {
        std::shared_ptr<State const> last;
        std::shared_ptr<State const> whole;  // the last whole turn's, which contributions belong to
        alerts::Checks checks;
        RulesDigests rules;
    };

    // A whole turn is owed since the first of the touched ones after the last whole one.
    struct Owed {
        Clock::time_point first;
        Clock::time_point last;
    };

    void connect(std::stop_token const& stop);
    bool take_lock(std::stop_token const& stop, Connection& writer);
    std::optional<Ask> wait_for_change(std::stop_token const& stop);
    bool wait(std::chrono::milliseconds at_most);
    void turn(Ask ask);
    void decide(Turn& turn, Ask ask);
    std::shared_ptr<State> see(Turn& turn, model::Book::Changes changes, model::Instant as_of,
                               bool whole);
    std::shared_ptr<model::Figures const> assess(Turn& turn, model::Book const& book);
    bool reload();
    void adopt(config::Rules rules);
    void forget();  // the book is a cache: the next turn reads everything again

    std::filesystem::path folder_;
    config::Rules rules_;
    RulesDigests digests_;
    std::unique_ptr<Connection> hints_;
    std::unique_ptr<Tables> tables_;
    std::optional<Known> known_;
    std::shared_ptr<State> next_;  // a copy of the last book, for the next turn to work on
    std::optional<Owed> owed_;
    Clock::time_point due_;  // when time alone asks for a turn
    std::optional<model::Engine> engine_;
    std::shared_ptr<model::Settings const> engine_model_;  // what the engine works by
    std::atomic<bool> reload_requested_ = false;
    Wake wake_;
};

}  // namespace process
