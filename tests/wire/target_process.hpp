#pragma once
// Purpose:   a simulated board in a process of its own, for tests of the wire.
// Ownership: the process, its link and its files end with the object.
// Threads:   one.

#include <sys/types.h>
#include <filesystem>
#include <nlohmann/json.hpp>
#include <string>

#include "drivers/config/board_file.hpp"

namespace lanewright::tests {

// A folder of its own under the system's temporary one, removed at the end.
class TemporaryFolder {
  public:
    TemporaryFolder();
    ~TemporaryFolder();
    TemporaryFolder(const TemporaryFolder&) = delete;
    TemporaryFolder& operator=(const TemporaryFolder&) = delete;
    std::filesystem::path path() const { return path_; }

  private:
    std::filesystem::path path_;
};

// The demonstration target, changed as the test wants: target["faults"] = ...
nlohmann::json demo_target();
// The demonstration board with this link, asked with a short deadline.
BoardFile demo_board(const std::string& link, double deadline_ms = 100);
// The same board with its monitor told where to look.
BoardFile demo_counted_board(const std::string& link, double deadline_ms = 100);

class TargetProcess {
  public:
    // Serves on one TCP port and one pseudo-terminal; returns when it is ready. Throws
    // std::runtime_error where it does not become so.
    explicit TargetProcess(const nlohmann::json& target);
    ~TargetProcess();  // SIGKILL unless it has ended
    TargetProcess(const TargetProcess&) = delete;
    TargetProcess& operator=(const TargetProcess&) = delete;

    std::string tcp() const { return "tcp:" + tcp_; }
    std::string serial() const { return "serial:" + link_; }
    std::string pty_path() const { return link_; }
    pid_t pid() const { return pid_; }
    int end(int signal);  // sends it and gives the exit code; -1 where it was killed

  private:
    TemporaryFolder folder_;
    pid_t pid_ = -1;
    int output_ = -1;
    std::string tcp_, link_;
};

}  // namespace lanewright::tests
