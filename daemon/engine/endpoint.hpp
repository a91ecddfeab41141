#pragma once
// Purpose:   one process a board: the lock of a link's endpoint and of the board behind it, common
//            to all users of the machine, and where its restore note lies.
// Ownership: the lock is held as long as the object lives.
// Threads:   one thread at a time.

#include <string>
#include <vector>

#include "daemon/store/file_lock.hpp"
#include "drivers/board/lane_reader.hpp"
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

    // Once the board has said who it is: a lock on the board itself, so that no second process
    // works on it over another link. Only where its identity has a value named "serial"; boards
    // without one cannot be told apart. Cause::busy names the other process.
    Result<void> hold_board(const Identity& identity);

    const std::string& name() const { return name_; }

    // Where the note of saved codes stands: one left by another user or state folder, as the lock
    // file tells, or the one of this state folder.
    const std::string& note_path() const { return note_path_; }

    // All notes that may hold codes of the board at hand: this endpoint's, and the one of the link
    // over which the board was last worked on.
    std::vector<std::string> notes() const;

    // Tells others what the holder does, and whether codes wait to be restored.
    Result<void> describe(const std::string& store, const std::string& run) const;

  private:
    std::string name_, note_path_, other_note_path_;
    FileLock lock_, board_lock_;
    bool holds_board_ = false;
};

// The folder of the lock files: LANEWRIGHT_LOCK_DIR where set, else /run/lock/lanewright, else
// /tmp/lanewright-locks.
std::string lock_directory();

}  // namespace lanewright
