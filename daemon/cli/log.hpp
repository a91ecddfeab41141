#pragma once
// Purpose:   what the program said, kept beside the store for the morning after: stderr of an
//            overnight run is often lost. Rotating, $XDG_STATE_HOME/lanewright/lanewright.log.
// Ownership: one log a process.
// Threads:   any.

#include <string>

namespace lanewright {

// Begins the log with the command line. A log that cannot be opened is said once on stderr and
// stops nothing: the store is the record, this is a convenience.
void open_log(int count, char** words);

void log_note(const std::string& text);
void log_trouble(const std::string& text);

}  // namespace lanewright
