#include "tests/support/program.hpp"

#include <fcntl.h>
#include <spawn.h>
#include <sys/wait.h>
#include <unistd.h>

#include <csignal>
#include <cstdlib>
#include <fstream>
#include <sstream>
#include <stdexcept>
#include <thread>

extern char** environ;

namespace tests {
namespace {

std::string text_of(std::filesystem::path const& file) {
    std::ifstream in{file, std::ios::binary};
    std::ostringstream text;
    text << in.rdbuf();
    return text.str();
}

// Starts the program with its two outputs in files of the folder.
pid_t start(std::vector<std::string> arguments, std::vector<std::string> const& environment,
            std::filesystem::path const& folder) {
    arguments.insert(arguments.begin(), LOADLINE_BINARY);
    std::vector<std::string> variables = environment;
    for (char** variable = environ; *variable != nullptr; ++variable)
        variables.emplace_back(*variable);
    std::vector<char*> argv;
    std::vector<char*> envp;
    for (auto& argument : arguments) argv.push_back(argument.data());
    for (auto& variable : variables) envp.push_back(variable.data());
    argv.push_back(nullptr);
    envp.push_back(nullptr);
    posix_spawn_file_actions_t files;
    posix_spawn_file_actions_init(&files);
    posix_spawn_file_actions_addopen(&files, 0, "/dev/null", O_RDONLY, 0);
    posix_spawn_file_actions_addopen(&files, 1, (folder / "out").c_str(), O_WRONLY | O_CREAT, 0600);
    posix_spawn_file_actions_addopen(&files, 2, (folder / "err").c_str(), O_WRONLY | O_CREAT, 0600);
    pid_t pid = -1;
    int const error =
        ::posix_spawn(&pid, LOADLINE_BINARY, &files, nullptr, argv.data(), envp.data());
    posix_spawn_file_actions_destroy(&files);
    if (error != 0) throw std::runtime_error("cannot start " LOADLINE_BINARY);
    return pid;
}

}  // namespace

Folder::Folder() {
    auto pattern = (std::filesystem::temp_directory_path() / "loadline-test.XXXXXX").string();
    if (::mkdtemp(pattern.data()) == nullptr) throw std::runtime_error("cannot make a folder");
    path_ = pattern;
}
Folder::~Folder() {
    std::filesystem::remove_all(path_);
}
void Folder::write(std::string const& file, std::string const& text) const {
    std::ofstream{path_ / file, std::ios::binary} << text;
}
std::string Folder::read(std::string const& file) const {
    return text_of(path_ / file);
}

void copy_shipped_configuration(Folder const& to) {
    std::filesystem::path const shipped = std::filesystem::path{LOADLINE_SOURCE} / "config";
    for (auto const& file : std::filesystem::directory_iterator{shipped})
        if (file.path().extension() == ".yaml" || file.path().extension() == ".csv")
            std::filesystem::copy(file.path(), to.path() / file.path().filename());
}

Ran run_loadline(std::vector<std::string> const& arguments,
                 std::vector<std::string> const& environment) {
    Folder const folder;
    int status = 0;
    ::waitpid(start(arguments, environment, folder.path()), &status, 0);
    return {WIFEXITED(status) ? WEXITSTATUS(status) : -1, folder.read("out"), folder.read("err")};
}

Served::Served(std::filesystem::path const& config, std::vector<std::string> const& environment)
    : pid_{start({"serve", "--config", config.string()}, environment, folder_.path())} {}

Served::~Served() {
    if (pid_ < 0) return;
    ::kill(pid_, SIGKILL);
    ::waitpid(pid_, nullptr, 0);
}

void Served::signal(int number) const {
    ::kill(pid_, number);
}

int Served::wait(std::chrono::seconds at_most) {
    int status = 0;
    bool const ended =
        becomes_true([&] { return ::waitpid(pid_, &status, WNOHANG) == pid_; }, at_most);
    if (!ended) return -1;
    pid_ = -1;
    return WIFEXITED(status) ? WEXITSTATUS(status) : -1;
}

std::string Served::log() const {
    return folder_.read("err");
}

bool becomes_true(std::function<bool()> const& condition, std::chrono::seconds at_most) {
    auto const end = std::chrono::steady_clock::now() + at_most;
    while (!condition()) {
        if (std::chrono::steady_clock::now() > end) return false;
        std::this_thread::sleep_for(std::chrono::milliseconds{20});
    }
    return true;
}

}  // namespace tests
