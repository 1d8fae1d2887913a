#pragma once

#include <sys/types.h>

#include <chrono>
#include <filesystem>
#include <functional>
#include <string>
#include <vector>

// The real program as a process, and the folder it is configured by.

namespace tests {

// A folder of its own, removed at the end.
class Folder {
public:
    Folder();
    ~Folder();
    Folder(Folder const&) = delete;
    Folder& operator=(Folder const&) = delete;
    [[nodiscard]] std::filesystem::path const& path() const { return path_; }
    void write(std::string const& file, std::string const& text) const;
    [[nodiscard]] std::string read(std::string const& file) const;

private:
    std::filesystem::path path_;
};

// The configuration the project ships, as a starting point.
void copy_shipped_configuration(Folder const& to);

struct Ran {
    int code = -1;
    std::string out;
    std::string err;
};

// Runs build/…/loadline with the arguments and `environment` ("NAME=value") added to our own.
Ran run_loadline(std::vector<std::string> const& arguments,
                 std::vector<std::string> const& environment);

// `loadline serve` in the background; killed at the end if it has not ended before.
class Served {
public:
    Served(std::filesystem::path const& config, std::vector<std::string> const& environment);
    ~Served();
    Served(Served const&) = delete;
    Served& operator=(Served const&) = delete;

    void signal(int number) const;
    // Its exit code, or -1 where it did not end in time (or by a signal).
    int wait(std::chrono::seconds at_most);
    [[nodiscard]] std::string log() const;

private:
    Folder folder_;
    pid_t pid_ = -1;
};

// Whether the condition became true within the time; looked at every 20 ms.
bool becomes_true(std::function<bool()> const& condition,
                  std::chrono::seconds at_most = std::chrono::seconds{20});

}  // namespace tests
