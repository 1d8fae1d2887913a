#include "daemon/service.hpp"

#include "daemon/watch.hpp"

#include <boost/asio/io_context.hpp>
#include <boost/asio/post.hpp>
#include <boost/asio/signal_set.hpp>
#include <boost/asio/steady_timer.hpp>
#include <spdlog/pattern_formatter.h>
#include <spdlog/sinks/stdout_sinks.h>
#include <spdlog/spdlog.h>

#include <csignal>
#include <cstdlib>
#include <exception>
#include <thread>
#include <utility>  // before Asio: its 1.74 uses std::exchange without it

namespace process {
namespace {

// SIGTERM leaves the turn in hand this long; its transaction is then left to the server to undo.
constexpr std::chrono::seconds drain_at_most{15};

// syslog(3)'s priority of a level, as the journal takes it at the start of a line.
class JournalPriority : public spdlog::custom_flag_formatter {
public:
    void format(spdlog::details::log_msg const& message, std::tm const&,
                spdlog::memory_buf_t& line) override {
        char priority = '6';
        if (message.level >= spdlog::level::err)
            priority = '3';
        else if (message.level == spdlog::level::warn)
            priority = '4';
        else if (message.level <= spdlog::level::debug)
            priority = '7';
        for (char const c : {'<', priority, '>'}) line.push_back(c);
    }
    [[nodiscard]] std::unique_ptr<custom_flag_formatter> clone() const override {
        return std::make_unique<JournalPriority>();
    }
};

}  // namespace

void start_log(std::string const& level) {
    auto formatter = std::make_unique<spdlog::pattern_formatter>();
    if (std::getenv("JOURNAL_STREAM") != nullptr)
        formatter->add_flag<JournalPriority>('J').set_pattern("%Jlevel=%l %v");
    else
        formatter->set_pattern("%Y-%m-%dT%H:%M:%S.%e%z level=%l %v");
    auto logger = std::make_shared<spdlog::logger>(
        "loadline", std::make_shared<spdlog::sinks::stderr_sink_mt>());
    logger->set_formatter(std::move(formatter));
    logger->set_level(spdlog::level::from_str(level));
    logger->flush_on(spdlog::level::info);
    spdlog::set_default_logger(std::move(logger));
}

int serve(config::Rules rules, std::filesystem::path const& folder) {
    std::signal(SIGPIPE, SIG_IGN);
    Watch watch{std::move(rules), folder};
    boost::asio::io_context loop{1};
    boost::asio::signal_set endings{loop, SIGTERM, SIGINT};
    boost::asio::signal_set reloads{loop, SIGHUP};
    boost::asio::steady_timer drain{loop};
    std::exception_ptr failure;

    std::jthread watching{[&](std::stop_token stop) {
        try {
            watch.run(std::move(stop));
        } catch (...) {
            failure = std::current_exception();
        }
        boost::asio::post(loop, [&] {
            drain.cancel();
            endings.cancel();
            reloads.cancel();
        });
    }};

    endings.async_wait([&](boost::system::error_code error, int signal) {
        if (error) return;
        spdlog::info("event=stopping signal={}", signal);
        watching.request_stop();
        watch.wake();
        drain.expires_after(drain_at_most);
        drain.async_wait([](boost::system::error_code cancelled) {
            if (cancelled) return;
            spdlog::warn("event=turn_abandoned text=\"its changes stay in change_log\"");
            std::_Exit(EXIT_SUCCESS);
        });
    });
    std::function<void(boost::system::error_code, int)> on_reload =
        [&](boost::system::error_code error, int) {
            if (error) return;
            watch.request_reload();
            reloads.async_wait(on_reload);
        };
    reloads.async_wait(on_reload);

    spdlog::info("event=started version={} config={}", LOADLINE_VERSION, folder.string());
    loop.run();
    watching.join();
    if (failure) std::rethrow_exception(failure);
    return EXIT_SUCCESS;
}

}  // namespace process
