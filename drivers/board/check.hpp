#pragma once
// Purpose:   is the board there, is it the right one, does it take and give back what is written,
//            and how good is the link? Moves no code.
// Ownership: values only.
// Threads:   io thread.

#include <cstdint>
#include <string>
#include <vector>

#include "drivers/board/board.hpp"

namespace lanewright {

struct ScratchTrial {
    std::uint32_t written = 0, read = 0;  // in the field's own units
    bool right() const { return written == read; }
};

struct CheckReport {
    Identity identity;
    FieldName scratch;
    std::vector<ScratchTrial> trials;
    bool scratch_put_back = false;  // the value found at first stands again
    SessionStatistics link;
    RoundTrips round_trips;
    std::string dialect, link_name;
    std::size_t most_operations = 0, in_flight = 0;  // the board's limits
    std::vector<std::string> warnings;               // of the link, for people

    bool good() const;  // every trial right, and put back
};

// Fails with the session's or reader's faults; a scratch field that does not give back what was
// written is no fault but a trial that is not right. `reads` short reads fill the histogram.
Task<CheckReport> check_board(Board& board, unsigned reads = 100);

}  // namespace lanewright
