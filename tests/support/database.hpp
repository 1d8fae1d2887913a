#pragma once

#include <pqxx/pqxx>

#include <memory>
#include <string>
#include <string_view>
#include <vector>

namespace tests {

// A fresh database with the schema, on the server of PGHOST; dropped when the test is done with it.
class Database {
public:
    Database();
    ~Database();
    Database(Database const&) = delete;
    Database& operator=(Database const&) = delete;

    [[nodiscard]] std::string const& name() const { return name_; }
    [[nodiscard]] std::string dsn() const;

    // One session, in which SET holds; each call is a transaction of its own, with any number of
    // statements. Errors are pqxx::sql_error.
    void exec(std::string_view sql);
    std::vector<std::vector<std::string>> query(std::string_view sql);  // null as "∅"
    std::string value(std::string_view sql);                            // of one row and column

private:
    std::string name_;
    std::unique_ptr<pqxx::connection> session_;
};

}  // namespace tests
