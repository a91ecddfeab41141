#include "daemon/cli/log.hpp"

#include <spdlog/sinks/rotating_file_sink.h>
#include <spdlog/spdlog.h>
#include <unistd.h>

#include <cstdio>
#include <filesystem>
#include <memory>

#include "daemon/engine/version.hpp"
#include "daemon/store/database.hpp"

namespace lanewright {

namespace {

constexpr std::size_t most_bytes = 4u << 20;
constexpr std::size_t kept_files = 3;

std::shared_ptr<spdlog::logger>& the_log() {
    static std::shared_ptr<spdlog::logger> log;
    return log;
}

}  // namespace

void open_log(int count, char** words) {
    try {
        const std::string folder = state_directory();
        std::filesystem::create_directories(folder);
        auto log = spdlog::rotating_logger_mt("lanewright", folder + "/lanewright.log", most_bytes,
                                              kept_files);
        log->set_pattern("%Y-%m-%dT%H:%M:%S.%e%z %P %l %v");
        log->flush_on(spdlog::level::info);
        the_log() = std::move(log);
    } catch (const std::exception& error) {
        std::fprintf(stderr, "lanewright: no log is kept: %s\n", error.what());
        return;
    }
    std::string line = "begins, version " + program_version() + " (" + git_hash() + "):";
    for (int i = 0; i < count; ++i) line += std::string(" ") + words[i];
    log_note(line);
}

void log_note(const std::string& text) {
    if (the_log()) the_log()->info(text);
}

void log_trouble(const std::string& text) {
    if (the_log()) the_log()->warn(text);
}

}  // namespace lanewright
