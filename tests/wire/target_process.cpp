#include "tests/wire/target_process.hpp"

#include <poll.h>
#include <sys/wait.h>
#include <unistd.h>
#include <csignal>
#include <cstdlib>
#include <fstream>
#include <stdexcept>

namespace lanewright::tests {

namespace fs = std::filesystem;

namespace {

const fs::path source_folder = LANEWRIGHT_SOURCE_DIR;

std::string read_line(int fd) {
    std::string line;
    char byte = 0;
    pollfd readable{fd, POLLIN, 0};
    while (::poll(&readable, 1, 20'000) == 1 && ::read(fd, &byte, 1) == 1 && byte != '\n') {
        line += byte;
    }
    return line;
}

}  // namespace

TemporaryFolder::TemporaryFolder() {
    std::string pattern = (fs::temp_directory_path() / "lanewright-wire-XXXXXX").string();
    if (::mkdtemp(pattern.data()) == nullptr) throw std::runtime_error("no temporary folder");
    path_ = pattern;
}

TemporaryFolder::~TemporaryFolder() {
    std::error_code ignored;
    fs::remove_all(path_, ignored);
}

nlohmann::json demo_target() {
    std::ifstream file(source_folder / "configs/targets/demo.json");
    nlohmann::json target = nlohmann::json::parse(file);
    target["board"] = (source_folder / "configs/boards/demo.json").string();
    target["time_scale"] = 0;
    return target;
}

namespace {

BoardFile board_at(const char* file, const std::string& link, double deadline_ms) {
    Complaints complaints;
    auto board = load_board_file((source_folder / "configs/boards" / file).string(), complaints);
    if (!board) throw std::runtime_error(complaints.text());
    std::string why;
    const auto parsed = parse_link(link, SerialLinkDescription{}, why);
    if (!parsed) throw std::runtime_error(why);
    board->link = *parsed;
    board->dialect.deadline_ms = deadline_ms;
    board->dialect.attempts = 6;
    return *board;
}

}  // namespace

BoardFile demo_board(const std::string& link, double deadline_ms) {
    return board_at("demo.json", link, deadline_ms);
}

BoardFile demo_counted_board(const std::string& link, double deadline_ms) {
    return board_at("demo_counted.json", link, deadline_ms);
}

TargetProcess::TargetProcess(const nlohmann::json& target)
    : link_((folder_.path() / "port").string()) {
    const std::string file = (folder_.path() / "target.json").string();
    std::ofstream(file) << target.dump();
    int ends[2];
    if (::pipe(ends) != 0) throw std::runtime_error("no pipe");
    pid_ = ::fork();
    if (pid_ == 0) {
        ::dup2(ends[1], STDOUT_FILENO);
        ::close(ends[0]);
        ::close(ends[1]);
        ::execl(LANEWRIGHT_TARGET, LANEWRIGHT_TARGET, "serve", "--target", file.c_str(), "--tcp",
                "127.0.0.1:0", "--pty", link_.c_str(), nullptr);
        ::_exit(127);
    }
    ::close(ends[1]);
    output_ = ends[0];
    const auto ready = nlohmann::json::parse(read_line(output_), nullptr, false);
    if (!ready.is_object() || ready.value("ready", false) != true) {
        end(SIGKILL);
        throw std::runtime_error("the simulated board did not become ready");
    }
    tcp_ = ready.at("tcp").at(0).get<std::string>();
}

TargetProcess::~TargetProcess() {
    end(SIGKILL);
    if (output_ >= 0) ::close(output_);
}

int TargetProcess::end(int signal) {
    if (pid_ <= 0) return -1;
    ::kill(pid_, signal);
    int status = 0;
    ::waitpid(pid_, &status, 0);
    pid_ = -1;
    return WIFEXITED(status) ? WEXITSTATUS(status) : -1;
}

}  // namespace lanewright::tests
