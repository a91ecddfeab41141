#pragma once
// Purpose:   one process a board: the lock of a link's endpoint, common to all users of the
//            machine, and where its restore note lies.
// Ownership: the lock is held as long as the object lives.
// Threads:   one thread at a time.

#include <string>

#include "daemon/store/file_lock.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/faults/fault.hpp"

namespace lanewright {

// The endpoint's one name, however it was written: resolved address and port; the by-id path of a
// serial device where it has one, else its real path (a pseudo-terminal keeps the path given, as
// its device number does not last).
std::string endpoint_name(const LinkDescription& link);

class Endpoint {
  public:
    Endpoint() = default;

    // Cause::busy, with pid and run, where another process holds the endpoint.
    static Result<Endpoint> take(const LinkDescription& link);

    const std::string& name() const { return name_; }

    // Where the note of saved codes stands: one left by another user or state folder, as the lock
    // file tells, or the one of this state folder.
    const std::string& note_path() const { return note_path_; }

    // Tells others what the holder does, and whether codes wait to be restored.
    Result<void> describe(const std::string& store, const std::string& run) const;

  private:
    std::string name_, note_path_;
    FileLock lock_;
};

// The folder of the lock files: LANEWRIGHT_LOCK_DIR where set, else /run/lock/lanewright, else
// /tmp/lanewright-locks.
std::string lock_directory();

}  // namespace lanewright
