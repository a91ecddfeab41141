#pragma once
// Purpose:   a run as text for people and as files for other programs: table, CSV, register writes.
// Ownership: values only.
// Threads:   no shared state.

#include <string>

#include "daemon/views/lane_result.hpp"

namespace lanewright {

// Without bytes that a terminal would obey: control bytes become \xNN, new lines stay.
std::string printable(const std::string& text);

// Broken at spaces so that no line is longer than 80 columns; each begins with `indent`, and the
// last ends with a newline.
std::string wrapped(const std::string& text, const std::string& indent);

// At most 80 columns; `colour` adds terminal escapes to the verdicts.
std::string run_table(const RunView& view, bool colour);

// All that `show` prints: head, table, and each lane's reason and notes.
std::string run_account(const RunView& view, bool colour);

// One line for each run, newest last, at most 80 columns.
std::string runs_table(const std::vector<RunView>& runs);

// One row a reading; units in the header's names; times in ISO 8601 with offset.
std::string readings_csv(const RunView& view);

// The writes that put the run's codes, in the order the board file declares: lane, register,
// address, mask and value in hex, comment. Throws StoreError where no lane has decided codes.
std::string register_writes(const RunView& view);

}  // namespace lanewright
