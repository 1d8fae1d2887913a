#include "tests/support/database.hpp"

#include "daemon/schema.hpp"

#include <fmt/format.h>
#include <unistd.h>

#include <cstdlib>
#include <iostream>
#include <stdexcept>

namespace tests {
namespace {

std::string dsn_of(std::string_view database) {
    if (std::getenv("PGHOST") == nullptr)
        throw std::runtime_error(
            "PGHOST is not set: run ./run test, which starts a private server");
    return fmt::format("dbname={} options='-c client_min_messages=warning'", database);
}

// CREATE and DROP DATABASE belong to no transaction, and to a session elsewhere.
void on_server(std::string const& statement) {
    pqxx::connection server{dsn_of("postgres")};
    pqxx::nontransaction{server}.exec(statement);
}

void drop(std::string const& database) noexcept {
    try {
        on_server(fmt::format("DROP DATABASE IF EXISTS {} WITH (FORCE)", database));
    } catch (std::exception const& e) {
        std::cerr << database << " is left on the server: " << e.what() << '\n';
    }
}

// Installing takes many times as long as copying, so a test process installs once.
class Template {
public:
    Template() : name{fmt::format("loadline_test_{}", getpid())} {
        on_server("CREATE DATABASE " + name);
        process::apply_schema(dsn_of(name));
    }
    ~Template() { drop(name); }
    Template(Template const&) = delete;
    Template& operator=(Template const&) = delete;

    std::string const name;
};

std::string fresh_database() {
    static Template const installed;
    static int count = 0;
    auto name = fmt::format("{}_{}", installed.name, ++count);
    on_server(fmt::format("CREATE DATABASE {} TEMPLATE {}", name, installed.name));
    return name;
}

}  // namespace

Database::Database()
    : name_{fresh_database()}, session_{std::make_unique<pqxx::connection>(dsn())} {}

Database::~Database() {
    session_.reset();
    drop(name_);
}

std::string Database::dsn() const {
    return dsn_of(name_);
}

void Database::exec(std::string_view sql) {
    query(sql);
}

std::vector<std::vector<std::string>> Database::query(std::string_view sql) {
    pqxx::nontransaction transaction{*session_};
    std::vector<std::vector<std::string>> rows;
    for (auto const& row : transaction.exec(std::string{sql})) {
        auto& fields = rows.emplace_back();
        for (auto const& field : row) fields.emplace_back(field.is_null() ? "∅" : field.c_str());
    }
    return rows;
}

std::string Database::value(std::string_view sql) {
    auto const rows = query(sql);
    if (rows.size() != 1 || rows.front().size() != 1)
        throw std::runtime_error(fmt::format("not one row and column: {}", sql));
    return rows.front().front();
}

}  // namespace tests
