#include "daemon/store/file_lock.hpp"

#include <fcntl.h>
#include <sys/file.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cerrno>
#include <cstdlib>
#include <cstring>
#include <fstream>
#include <sstream>
#include <utility>

namespace lanewright {

namespace {

Fault fault_from_errno(const std::string& path, const std::string& what) {
    const int error = errno;
    Fault fault;
    fault.cause = error == EACCES || error == EPERM ? Cause::no_permission : Cause::io;
    fault.what =
        "the lock of " + what + " at " + path + " cannot be taken: " + std::strerror(error);
    return fault;
}

// Without O_CREAT first: Linux forbids O_CREAT on another user's file in a sticky folder
// (fs.protected_regular), even where the file may be opened.
int open_or_create(const std::string& path) {
    const int existing = ::open(path.c_str(), O_RDWR | O_CLOEXEC);
    if (existing >= 0 || errno != ENOENT) return existing;
    const int created = ::open(path.c_str(), O_RDWR | O_CLOEXEC | O_CREAT | O_EXCL, 0666);
    if (created < 0) return errno == EEXIST ? ::open(path.c_str(), O_RDWR | O_CLOEXEC) : created;
    ::fchmod(created, 0666);  // other users' processes must be able to lock it too
    return created;
}

}  // namespace

FileLock::FileLock(FileLock&& other) noexcept : descriptor_(std::exchange(other.descriptor_, -1)) {}

FileLock& FileLock::operator=(FileLock&& other) noexcept {
    std::swap(descriptor_, other.descriptor_);
    return *this;
}

FileLock::~FileLock() {
    if (descriptor_ >= 0) ::close(descriptor_);
}

Result<FileLock> FileLock::take(const std::string& path, const std::string& what) {
    FileLock lock(open_or_create(path));
    if (lock.descriptor_ < 0) return fault_from_errno(path, what);
    if (::flock(lock.descriptor_, LOCK_EX | LOCK_NB) == 0) return lock;
    if (errno != EWOULDBLOCK) return fault_from_errno(path, what);
    const std::string pid = lock_file_value(path, "pid");
    Fault fault;
    fault.cause = Cause::busy;
    fault.what = what + " is held by process " + (pid.empty() ? "(unknown)" : pid);
    const std::string run = lock_file_value(path, "run");
    if (!run.empty()) fault.what += ", run " + run;
    fault.hint = "Wait until it ends, or stop it (kill " + (pid.empty() ? "PID" : pid) +
                 " lets it restore the board first)";
    return fault;
}

Result<void> FileLock::describe(const std::string& lines) const {
    const std::string text = "pid=" + std::to_string(::getpid()) + "\n" + lines;
    if (::ftruncate(descriptor_, 0) != 0 ||
        ::pwrite(descriptor_, text.data(), text.size(), 0) != static_cast<ssize_t>(text.size())) {
        Fault fault;
        fault.cause = Cause::io;
        fault.what = std::string("a lock file cannot be written: ") + std::strerror(errno);
        return fault;
    }
    return {};
}

// Lines of proc_locks(5): "1: FLOCK  ADVISORY  WRITE 1234 08:01:5678 0 EOF". The device is left
// out: layered file systems tell another one there than stat does.
std::int64_t lock_holder(const std::string& path) {
    struct stat info{};
    const std::string described = lock_file_value(path, "pid");
    if (described.empty() || ::stat(path.c_str(), &info) != 0) return 0;
    std::ifstream locks("/proc/locks");
    std::string line;
    while (std::getline(locks, line)) {
        std::istringstream words(line);
        std::string ordinal, kind, advice, access, pid, place;
        if (!(words >> ordinal >> kind >> advice >> access >> pid >> place)) continue;
        const bool here = place.ends_with(":" + std::to_string(info.st_ino));
        if (kind == "FLOCK" && access == "WRITE" && pid == described && here) {
            return std::strtoll(pid.c_str(), nullptr, 10);
        }
    }
    return 0;
}

std::string lock_file_value(const std::string& path, const std::string& key) {
    std::ifstream in(path);
    std::string line;
    while (std::getline(in, line)) {
        if (line.starts_with(key + "=")) return line.substr(key.size() + 1);
    }
    return {};
}

}  // namespace lanewright
