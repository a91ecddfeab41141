#pragma once
// Purpose:   what every verb that talks to a board does first: read the board file, take the
//            endpoint for this process, open the link, know the board.
// Ownership: BoardAtHand holds the endpoint's lock; the Board is the caller's.
// Threads:   main thread, which is the io thread.

#include <memory>
#include <string>

#include "daemon/engine/endpoint.hpp"
#include "daemon/engine/engine.hpp"
#include "drivers/board/board.hpp"

namespace lanewright {

struct BoardAtHand {
    BoardFile file;
    Endpoint endpoint;
};

// All complaints about a file as one fault.
Fault fault_of(const Complaints& complaints);

// `link` in place of the board file's own where it is not empty. Cause::bad_config, busy.
Result<BoardAtHand> take_board(const std::string& board_path, const std::string& link);

// Opens the board with its file's link; the link's warnings go to stderr.
Task<std::unique_ptr<Board>> reach(BoardFile file, TimeSource* time);

// Wire statistics as a run keeps them.
LinkCounts counts_of(const Board& board);

}  // namespace lanewright
