#pragma once
// Purpose:   whoever carries out register batches: a session with a board, or a test.
// Ownership: an implementation owns its connection.
// Threads:   io thread; any number of calls under way at once.

#include "drivers/faults/fault.hpp"
#include "drivers/io/task.hpp"
#include "drivers/registers/batch.hpp"

namespace lanewright {

// For batches that belong to no lane.
constexpr Lane board_wide{0xFFFF};

class Registers {
  public:
    virtual ~Registers() = default;

    // Carries the batch out, trying again where that cannot carry it out twice. Success: the
    // board's reply, be it that an operation failed (BatchReply::outcome). Faults:
    //   timeout          no answer after every attempt, or until the deadline; the batch may be
    //                    repeated by the caller, or was never sent
    //   outcome_unknown  sent, not repeatable, and nobody can say whether it was carried out
    //   board_reset      the registers are at their reset values; each lane is told so once, be
    //                    it that nothing of it was under way then
    //   unreachable      the link is gone and stayed so; nothing was carried out that matters
    //   refused          the board, or its limits, would not have it; nothing was carried out
    //   wrong_board, stopped
    virtual Task<BatchReply> run(Lane lane, Batch batch, TimePoint deadline) = 0;

    // Whether the batch can be carried out in one; `why` says what is too much.
    virtual bool fits(const Batch& batch, std::string& why) const = 0;

    // How long run() may take at worst while the board answers at all: every attempt, with the
    // batch's own waits. Deadlines are made of it.
    virtual std::chrono::nanoseconds longest(const Batch& batch) const = 0;

    // Resets that were noticed so far.
    virtual std::uint64_t resets() const { return 0; }
};

}  // namespace lanewright
