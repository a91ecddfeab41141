#pragma once
// Purpose:   the note that stands on disk while a board may hold codes that nobody decided on: what
//            is to be written at the next contact, whatever starts next and with whichever store.
// Ownership: values; the note's file belongs to whoever holds the endpoint's lock.
// Threads:   one thread at a time.
// Errors:    Cause::io with the path; a note that cannot be read is never deleted.

#include <optional>
#include <string>
#include <vector>

#include "daemon/store/events.hpp"
#include "drivers/faults/fault.hpp"

namespace lanewright {

struct RestoreNote {
    std::string endpoint, board;
    Identity identity;
    RunId run;
    std::string store;
    std::vector<SavedLane> lanes;  // what each lane is to hold; lanes that do are left out

    // Replaces the lane's entry, or adds it.
    void set(const SavedLane& lane);
    void drop(Lane lane);
};

// The same names with the same values, in whatever order.
bool same_board(const Identity& one, const Identity& other);

// Durable on return: written beside, synced, renamed, folder synced. An empty note is removed.
Result<void> write_note(const std::string& path, const RestoreNote& note);

// Empty where there is none.
Result<std::optional<RestoreNote>> read_note(const std::string& path);

}  // namespace lanewright
