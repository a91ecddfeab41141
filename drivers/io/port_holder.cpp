#include "drivers/io/port_holder.hpp"

#include <sys/stat.h>
#include <sys/sysmacros.h>
#include <unistd.h>
#include <charconv>
#include <cstdio>
#include <filesystem>
#include <fstream>
#include <sstream>
#include <string_view>

namespace lanewright {

namespace {

std::string command_of(pid_t pid) {
    std::ifstream file("/proc/" + std::to_string(pid) + "/comm");
    std::string name;
    std::getline(file, name);
    return name;
}

std::optional<pid_t> number_of(std::string_view text) {
    pid_t pid = 0;
    const auto [end, failed] = std::from_chars(text.data(), text.data() + text.size(), pid);
    if (failed != std::errc{} || end != text.data() + text.size() || pid <= 0) return std::nullopt;
    return pid;
}

// A line reads "1: FLOCK  ADVISORY  WRITE 1234 00:05:678 0 EOF"; waiting ones have "->" in it.
std::optional<pid_t> holder_of_lock(const struct stat& file) {
    char wanted[64];
    std::snprintf(wanted, sizeof wanted, "%02x:%02x:%lu", major(file.st_dev), minor(file.st_dev),
                  static_cast<unsigned long>(file.st_ino));
    std::ifstream locks("/proc/locks");
    for (std::string line; std::getline(locks, line);) {
        std::istringstream words(line);
        std::string number, kind, advice, access, pid, place;
        words >> number >> kind >> advice >> access >> pid >> place;
        if (kind == "FLOCK" && place == wanted) return number_of(pid);
    }
    return std::nullopt;
}

bool has_open(const std::filesystem::path& process, const struct stat& wanted) {
    std::error_code failed;
    std::filesystem::directory_iterator files(process / "fd", failed), end;
    for (; !failed && files != end; files.increment(failed)) {
        struct stat seen{};
        if (::stat(files->path().c_str(), &seen) != 0) continue;
        if (seen.st_ino == wanted.st_ino && seen.st_dev == wanted.st_dev) return true;
    }
    return false;
}

std::optional<pid_t> process_with_open(const struct stat& wanted) {
    std::error_code failed;
    std::filesystem::directory_iterator processes("/proc", failed), end;
    for (; !failed && processes != end; processes.increment(failed)) {
        const auto pid = number_of(processes->path().filename().string());
        if (pid && *pid != ::getpid() && has_open(processes->path(), wanted)) return pid;
    }
    return std::nullopt;
}

}  // namespace

std::optional<Holder> find_holder(int fd) {
    struct stat file{};
    if (::fstat(fd, &file) != 0) return std::nullopt;
    auto pid = holder_of_lock(file);
    if (!pid) pid = process_with_open(file);
    if (!pid) return std::nullopt;
    return Holder{*pid, command_of(*pid)};
}

std::string text_of(const std::optional<Holder>& holder) {
    if (!holder) return "another process";
    std::string text = "process " + std::to_string(holder->pid);
    if (!holder->command.empty()) text += " (" + holder->command + ")";
    return text;
}

}  // namespace lanewright
