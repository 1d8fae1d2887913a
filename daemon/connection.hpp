#pragma once

#include <pqxx/connection>

#include <memory>
#include <stdexcept>
#include <string>
#include <string_view>

// The one kind of database session: its settings, its role, and what its failures mean.

namespace process {

// What to do about a failure.
enum class Trouble {
    lost,    // the session is gone, or the server not there: connect again, read everything again
    retry,   // the transaction lost a race: the same again
    busy,    // the server is short of something: wait, then the same again
    denied,  // a right or a role is missing: the message names the one GRANT to ask for
    usage,   // what was asked for cannot be done: the message says what can
    ours     // anything else is our mistake
};

class DatabaseError : public std::runtime_error {
public:
    DatabaseError(Trouble trouble, std::string sqlstate, std::string const& message)
        : std::runtime_error{message}, trouble_{trouble}, sqlstate_{std::move(sqlstate)} {}
    [[nodiscard]] Trouble trouble() const { return trouble_; }
    [[nodiscard]] std::string const& sqlstate() const { return sqlstate_; }

private:
    Trouble trouble_;
    std::string sqlstate_;
};

// Sorts whatever is being thrown. Call inside a catch block; always throws: DatabaseError for the
// database's failures, anything else as it came.
[[noreturn]] void rethrow_sorted();

// Runs `work` with its failures sorted.
template <class Work>
decltype(auto) sorted(Work&& work) {
    try {
        return std::forward<Work>(work)();
    } catch (...) {
        rethrow_sorted();
    }
}

// A session. It never reconnects by itself: once broken, every later use says so.
class Connection {
public:
    // database: a libpq connection string, "" for libpq's own environment. purpose: what the server
    // shows beside `loadline` in its list of sessions. role: "" keeps the login's own rights.
    Connection(std::string const& database, std::string_view purpose, std::string_view role);

    pqxx::connection& session() { return *session_; }

    // The writer's lock: whoever holds it is the only process that writes results.
    bool try_writer_lock();

    // From now on hints of changes arrive on socket(); `drain_hints` takes them off it.
    void listen_for_changes();
    void drain_hints();
    [[nodiscard]] int socket() const;

private:
    std::unique_ptr<pqxx::connection> session_;
    std::unique_ptr<class HintReceiver> receiver_;

public:
    ~Connection();
    Connection(Connection&&) noexcept;
    Connection& operator=(Connection&&) noexcept;
};

}  // namespace process
