#pragma once
// Purpose:   measures and sets the lanes of one board through its registers, by the sequences that
//            its board file declares.
// Ownership: owns a copy of the board file; refers to RegisterMap, Registers and TimeSource, which
//            must outlive it.
// Threads:   io thread; one call a lane at a time. Lanes that share a monitor take turns by
//            themselves.
// Faults:    of the session, and not_accepted (a write read back otherwise), wait_expired (other
//            than for lock), not_allowed (outside roles, limits, forbidden combinations),
//            bad_config (the monitor cannot measure what is asked for).

#include <cstdint>
#include <memory>
#include <vector>

#include "drivers/board/identity.hpp"
#include "drivers/board/lane_reader.hpp"
#include "drivers/board/registers.hpp"
#include "drivers/board/sequences.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/io/time_source.hpp"
#include "drivers/io/turnstile.hpp"
#include "drivers/registers/register_map.hpp"

namespace lanewright {

// The bits that the board's monitor really dwells for a wish: the next power of two where it is
// told an exponent. Whoever budgets should ask for that many.
std::uint64_t dwelt_bits(const BoardFile& board, std::uint64_t wanted_bits);

class BoardReader final : public LaneReader {
  public:
    BoardReader(BoardFile board, const RegisterMap& map, Registers& registers, TimeSource& time);

    Task<Identity> identify() override;
    Task<SavedLane> save(Lane lane) override;
    Task<Codes> codes(Lane lane) override;

    // Where lock does not come, `locked` is false and the rest of the sequence is carried out.
    Task<Applied> apply(Lane lane, Codes codes) override;

    // Apply and margin sequence in one batch where the dialect's limits allow, else in as few as
    // they do. Lock that does not come gives a reading of Status::no_lock. Latched monitors take
    // MarginWanted only, at an error ratio not below the monitor's lowest.
    Task<LaneReading> read(Lane lane, Request request, std::uint32_t ordinal) override;

    // Cause::not_allowed where the saved codes themselves are outside the board file's limits.
    Task<Codes> restore(Lane lane, SavedLane saved) override;
    Task<void> bring_up(Lane lane) override;

  private:
    struct Carried {
        BatchReply reply;
        std::vector<WireOperation> wire;
        bool locked = true;
    };

    Task<BatchReply> run(Lane lane, Batch batch);
    Task<Carried> carry_out(Lane lane, Compiled compiled, SequenceValues values);
    Task<Turnstile::Pass> take_monitor(Lane lane, Batch batch);
    Task<SequenceValues> values_for(Lane lane, Codes codes);
    Result<LaneReading> reading_of(const Compiled& compiled, const Carried& carried,
                                   const Request& request, const SequenceValues& values) const;
    Fault at(Lane lane, Fault fault) const;

    BoardFile board_;
    const RegisterMap& map_;
    Registers& registers_;
    TimeSource& time_;
    IdentityCheck identity_;
    Stop never_;  // the session's own stop ends whoever holds a monitor
    std::vector<std::unique_ptr<Turnstile>> monitors_;
    std::vector<std::size_t> monitor_of_lane_;  // monitors_.size(): one of its own
};

}  // namespace lanewright
