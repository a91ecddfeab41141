#pragma once
// Purpose:   measures and sets the lanes of one board through its registers, by the sequences that
//            its board file declares.
// Ownership: owns a copy of the board file; refers to RegisterMap, Registers and TimeSource, which
//            must outlive it.
// Threads:   io thread; one call a lane at a time. Lanes that share a monitor take turns by
//            themselves.
// Faults:    of the session, and not_accepted (a write read back otherwise, or the monitor tells
//            what cannot be), wait_expired (other than for lock), not_allowed (outside roles,
//            limits, forbidden combinations), bad_config (the monitor cannot measure what is asked
//            for), codes_changed (read again at the end of a reading, a code is no longer as
//            written). Where the board file declares a sentinel, board_reset comes of it as well;
//            each lane is told so once.

#include <cstdint>
#include <memory>
#include <vector>

#include "drivers/board/identity.hpp"
#include "drivers/board/lane_reader.hpp"
#include "drivers/board/reading_end.hpp"
#include "drivers/board/registers.hpp"
#include "drivers/board/sentinel.hpp"
#include "drivers/board/sequences.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/io/time_source.hpp"
#include "drivers/io/turnstile.hpp"
#include "drivers/registers/register_map.hpp"

namespace lanewright {

// The bits that a latched monitor really dwells for a wish: the next power of two where it is told
// an exponent. Whoever budgets should ask for that many. A counted monitor shares out what it is
// given, so it dwells the wish at most.
std::uint64_t dwelt_bits(const BoardFile& board, std::uint64_t wanted_bits);

class BoardReader final : public LaneReader {
  public:
    BoardReader(BoardFile board, const RegisterMap& map, Registers& registers, TimeSource& time);

    Task<Identity> identify() override;
    Task<SavedLane> save(Lane lane) override;
    Task<Codes> codes(Lane lane) override;

    // Where lock does not come, `locked` is false and the rest of the sequence is carried out.
    Task<Applied> apply(Lane lane, Codes codes) override;

    // Lock that does not come gives a reading of Status::no_lock.
    // Latched monitors: apply and margin sequence in one batch where the dialect's limits allow,
    // else in as few as they do; MarginWanted only, at an error ratio not below the monitor's
    // lowest. Counted monitors: one batch for codes and origin, then looks by the batch, the
    // monitor held all the while. LooksWanted gives counts without edges, in the order of the
    // looks; each at the nearest step, and with the bits that were really counted.
    // Telemetry, the codes once more and the sentinel are read in the last batch, or in one more
    // where a search ends before its looks do.
    Task<LaneReading> read(Lane lane, Request request, std::uint32_t ordinal) override;

    // Cause::not_allowed where the saved codes themselves are outside the board file's limits.
    Task<Codes> restore(Lane lane, SavedLane saved) override;
    Task<void> bring_up(Lane lane) override;
    Task<std::vector<StatusItem>> status(Lane lane) override;

    // Resets that only the sentinel showed.
    std::uint64_t resets() const { return sentinel_.resets(); }

  private:
    struct Carried {
        BatchReply reply;
        std::vector<WireOperation> wire;
        std::optional<Compiled::LockMissed> missed;
        bool locked() const { return !missed; }
    };

    Task<BatchReply> run(Lane lane, Batch batch);
    Task<Carried> carry(Lane lane, Compiled compiled);
    Task<Carried> carry_out(Lane lane, Compiled compiled, SequenceValues values);
    // `longest`: of one reading, at worst.
    Task<Turnstile::Pass> take_monitor(Lane lane, std::chrono::nanoseconds longest);
    Task<SequenceValues> values_for(Lane lane, Codes codes);
    Result<Compiled> begin_reading(Lane lane, const Request& request, const SequenceValues& values);
    // What every reading tells beside its margin, and whether it counts at all.
    Result<void> finish(Lane lane, const ReadingEnd& end, const Compiled& compiled,
                        const BatchReply& reply, LaneReading& out);
    Task<LaneReading> end_alone(Lane lane, ReadingEnd end, LaneReading out);
    Task<LaneReading> read_latched(Lane lane, Request request, std::uint32_t ordinal);
    Task<LaneReading> read_counted(Lane lane, Request request, std::uint32_t ordinal);
    LaneReading latched_reading_of(const Compiled& compiled, const Carried& carried,
                                   const Request& request, const SequenceValues& values) const;
    struct LookJob;  // one counted reading under way
    Task<void> take_looks(Lane lane, LookJob* job, std::vector<Look> looks, bool last);
    Task<void> look_around(Lane lane, LookJob* job);
    Task<LaneReading> counted_reading_of(Lane lane, LookJob job, Request request);
    std::chrono::nanoseconds longest_of(Lane lane, const LookJob& job, const Compiled& begin) const;
    Result<void> not_reset(Lane lane);
    Result<void> plant_sentinel(Lane lane, Compiled& compiled);
    Fault at(Lane lane, Fault fault) const;

    BoardFile board_;
    const RegisterMap& map_;
    Registers& registers_;
    TimeSource& time_;
    IdentityCheck identity_;
    Sentinel sentinel_;
    Stop never_;  // the session's own stop ends whoever holds a monitor
    std::vector<std::unique_ptr<Turnstile>> monitors_;
    std::vector<std::size_t> monitor_of_lane_;  // monitors_.size(): one of its own
};

}  // namespace lanewright
