#pragma once
// Purpose:   one holder of a file at a time, across processes and users; says who holds it.
// Ownership: holds the descriptor; the lock ends with the object or the process.
// Threads:   one thread at a time per object.
// Errors:    Cause::busy names the holder's pid; Cause::no_permission; Cause::io.

#include <cstdint>
#include <string>

#include "drivers/faults/fault.hpp"

namespace lanewright {

class FileLock {
  public:
    FileLock() = default;
    FileLock(FileLock&& other) noexcept;
    FileLock& operator=(FileLock&& other) noexcept;
    ~FileLock();

    // Takes the lock at once or not at all. `what` names the thing locked, for the message.
    static Result<FileLock> take(const std::string& path, const std::string& what);

    // Lines "key=value" that tell others about the holder; the pid's line is added.
    Result<void> describe(const std::string& lines) const;

  private:
    explicit FileLock(int descriptor) : descriptor_(descriptor) {}
    int descriptor_ = -1;
};

// The pid of the process that holds the lock at present; 0: nobody does. Asks the kernel's list, so
// that a look never gets in the way of who takes the lock next.
std::int64_t lock_holder(const std::string& path);

// The value of a "key=value" line of such a file, or empty.
std::string lock_file_value(const std::string& path, const std::string& key);

}  // namespace lanewright
