#include "daemon/connection.hpp"

#include <fmt/format.h>
#include <pqxx/pqxx>

namespace process {
namespace {

// A statement may wait for a lock or run for so long; the model runs inside the transaction, so an
// idle one is given more.
constexpr std::string_view session_settings =
    "SET TimeZone = 'UTC'; SET DateStyle = 'ISO'; SET extra_float_digits = 1; "
    "SET client_encoding = 'UTF8'; SET search_path = pg_catalog, pg_temp; "
    "SET lock_timeout = '2s'; SET statement_timeout = '60s'; "
    "SET idle_in_transaction_session_timeout = '10min'";

Trouble trouble_of(std::string_view sqlstate) {
    if (sqlstate == "40001" || sqlstate == "40P01" || sqlstate == "55P03" || sqlstate == "57014" ||
        sqlstate == "23505")
        return Trouble::retry;
    if (sqlstate.starts_with("57P") || sqlstate.starts_with("08")) return Trouble::lost;
    if (sqlstate.starts_with("53")) return Trouble::busy;
    if (sqlstate == "42501" || sqlstate.starts_with("28")) return Trouble::denied;
    if (sqlstate == "55000" || sqlstate == "22023" || sqlstate == "P0002") return Trouble::usage;
    return Trouble::ours;
}

// The first line of a message.
std::string first_line(std::string_view text) {
    while (!text.empty() && (text.back() == '\n' || text.back() == ' ')) text.remove_suffix(1);
    return std::string{text.substr(0, text.find('\n'))};
}

// What the server says, without its severity and the statement it quotes.
std::string said_by(pqxx::sql_error const& error) {
    auto message = first_line(error.what());
    if (message.starts_with("ERROR:")) message.erase(0, message.find_first_not_of(' ', 6));
    return message;
}

}  // namespace

class HintReceiver : public pqxx::notification_receiver {
public:
    explicit HintReceiver(pqxx::connection& session)
        : pqxx::notification_receiver{session, "loadline_change"} {}
    void operator()(std::string const&, int) override {}
};

void rethrow_sorted() {
    try {
        throw;
    } catch (pqxx::insufficient_privilege const& error) {  // libpqxx 6.4 leaves out its SQLSTATE
        throw DatabaseError{Trouble::denied, "42501", said_by(error)};
    } catch (pqxx::insufficient_resources const& error) {
        throw DatabaseError{Trouble::busy, "53000", said_by(error)};
    } catch (pqxx::unique_violation const& error) {
        throw DatabaseError{Trouble::retry, "23505", said_by(error)};
    } catch (pqxx::undefined_table const& error) {
        throw DatabaseError{Trouble::usage, "42P01",
                            said_by(error) + ": run `loadline schema install` first"};
    } catch (pqxx::sql_error const& error) {
        throw DatabaseError{trouble_of(error.sqlstate()), error.sqlstate(), said_by(error)};
    } catch (pqxx::serialization_failure const& error) {
        throw DatabaseError{Trouble::retry, "40001", first_line(error.what())};
    } catch (pqxx::deadlock_detected const& error) {
        throw DatabaseError{Trouble::retry, "40P01", first_line(error.what())};
    } catch (pqxx::statement_completion_unknown const& error) {
        throw DatabaseError{Trouble::lost, "40003", first_line(error.what())};
    } catch (pqxx::transaction_rollback const& error) {
        throw DatabaseError{Trouble::retry, "40000", first_line(error.what())};
    } catch (pqxx::in_doubt_error const& error) {
        throw DatabaseError{Trouble::lost, "08007", first_line(error.what())};
    } catch (pqxx::broken_connection const& error) {
        throw DatabaseError{Trouble::lost, "08006", first_line(error.what())};
    }
}

Connection::Connection(std::string const& database, std::string_view purpose,
                       std::string_view role) {
    sorted([&] {
        session_ = std::make_unique<pqxx::connection>(fmt::format(
            "{} fallback_application_name='loadline {}' connect_timeout=5 keepalives_idle=5 "
            "keepalives_interval=2 keepalives_count=3 tcp_user_timeout=10000",
            database, purpose));
// A silent reconnect would lose the lock, the role and the settings.
#pragma GCC diagnostic push
#pragma GCC diagnostic ignored "-Wdeprecated-declarations"
        session_->inhibit_reactivation(true);
#pragma GCC diagnostic pop
        session_->set_verbosity(pqxx::connection_base::normal);
        pqxx::nontransaction setup{*session_};
        setup.exec(std::string{session_settings});
        if (role.empty()) return;
        auto const login = setup.exec1("SELECT session_user")[0].as<std::string>();
        try {
            setup.exec("SET ROLE " + setup.quote_name(std::string{role}));
        } catch (pqxx::sql_error const& error) {
            // 22023: there is no such role. 42501: the login is no member of it.
            if (error.sqlstate() == "22023")
                throw DatabaseError{Trouble::denied, "22023",
                                    fmt::format("role {} does not exist: run `loadline schema "
                                                "install` first",
                                                role)};
            throw DatabaseError{Trouble::denied, error.sqlstate(),
                                fmt::format("{} is not a member of {}: ask for GRANT {} TO {}",
                                            login, role, role, setup.quote_name(login))};
        }
    });
}

Connection::~Connection() = default;
Connection::Connection(Connection&&) noexcept = default;
Connection& Connection::operator=(Connection&&) noexcept = default;

bool Connection::try_writer_lock() {
    return sorted([&] {
        pqxx::nontransaction work{*session_};
        // 'load' in ASCII and the second lock of ours; the first damps the hints.
        return work.exec1("SELECT pg_try_advisory_lock(1819238756, 2)")[0].as<bool>();
    });
}

void Connection::listen_for_changes() {
    sorted([&] { receiver_ = std::make_unique<HintReceiver>(*session_); });
}

void Connection::drain_hints() {
    sorted([&] { session_->get_notifs(); });
}

int Connection::socket() const {
    return session_->sock();
}

}  // namespace process
