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
    void connect(std::stop_token const& stop);
    bool take_lock(std::stop_token const& stop, Connection& writer);
    std::optional<Trigger> wait_for_change(std::stop_token const& stop);
    void wait(std::chrono::milliseconds at_most);
    void turn(Trigger trigger);
    void decide(Turn& turn, Trigger trigger, model::Instant as_of);
    bool reload();
    void adopt(config::Rules rules);
    void forget();  // the book is a cache: the next turn reads everything again

    // What the last committed turn left behind.
    struct Known {
        model::Book book;
        std::shared_ptr<model::Figures const> figures;
        std::shared_ptr<alerts::Limits const> limits;
        alerts::Checks checks;
        RulesDigests rules;
    };

    std::filesystem::path folder_;
    config::Rules rules_;
    RulesDigests digests_;
    std::unique_ptr<Connection> hints_;
    std::unique_ptr<Tables> tables_;
    std::optional<Known> known_;
    std::chrono::steady_clock::time_point due_;  // when time alone asks for a turn
    std::atomic<bool> reload_requested_ = false;
    Wake wake_;
};

}  // namespace process
