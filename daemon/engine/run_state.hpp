#pragma once
// Purpose:   what a run has come to: a pure fold over its stored events, for resume, results and
//            pages alike.
// Ownership: values only.
// Threads:   no shared state.

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "daemon/store/events.hpp"

namespace lanewright {

struct LaneReadingRecord {
    std::uint32_t ordinal = 0;
    Stage stage = Stage::search;
    std::string why;
    Reading reading;
    std::int64_t at_ns = 0;
};

struct LaneState {
    std::optional<SavedLane> saved;
    std::vector<LaneReadingRecord> readings;  // in order of ordinal
    std::uint32_t void_count = 0;
    std::optional<Decision> decision;
    std::optional<LaneFinished> finished;
    std::optional<Settlement> settled;  // of the codes on the chip; empty again once they move
    bool moved = false;                 // codes went out that are not settled yet
    std::optional<Codes> last_written;  // by apply, or by a restore at a later contact

    // Codes as found, in the order of the board file's dimensions.
    std::optional<Codes> former() const;
};

struct RunState {
    std::optional<Identity> identity;
    std::map<std::uint16_t, LaneState> lanes;
    std::optional<RunEnded> ended;  // empty while running, interrupted or resumed
    LinkCounts link;                // summed over the resumptions that ended in order
    double wall_s = 0;
    std::uint32_t resumptions = 0;

    void apply(const StoredEvent& stored);
    // No further reading is to be taken: every lane of the run is finished.
    bool complete(const std::vector<std::uint16_t>& run_lanes) const;

  private:
    std::map<std::pair<std::uint16_t, std::uint32_t>, std::pair<Stage, std::string>> intents_;
};

RunState fold(const std::vector<StoredEvent>& events);

// The tuned values of a saved lane, in order.
Codes codes_of(const SavedLane& saved);
// The same lane with other codes: what is to be written when those are to stay.
SavedLane with_codes(SavedLane saved, const Codes& codes);

}  // namespace lanewright
