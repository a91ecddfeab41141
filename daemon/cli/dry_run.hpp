#pragma once
// Purpose:   what a run would do, without a write: fields it may write, first batch, bench time.
// Ownership: refers to its arguments for the call only.
// Threads:   main thread, which is the io thread.

#include "daemon/cli/board_at_hand.hpp"
#include "daemon/engine/tune.hpp"

namespace lanewright {

// Reaches and identifies the board; returns the exit code.
int dry_run(const BoardAtHand& at_hand, const TuneRequest& request, TimeSource& time, bool json);

}  // namespace lanewright
