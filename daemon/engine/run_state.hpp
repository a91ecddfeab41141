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

#include "daemon/engine/edge_statistics.hpp"
#include "daemon/store/events.hpp"

namespace lanewright {

// Codes that change without us are written anew once; the next time the lane is given up.
inline constexpr std::uint32_t most_codes_changed = 2;

struct LaneReadingRecord {
    std::uint32_t ordinal = 0;
    Stage stage = Stage::search;
    std::string why;
    Reading reading;
    std::int64_t at_ns = 0;
};

struct LaneState {
    std::optional<SavedLane> saved;
    std::vector<LaneReadingRecord> readings;  // as taken; the strategy's in order of ordinal
    std::uint32_t void_count = 0;
    std::optional<Decision> decision;
    std::optional<LaneFinished> finished;
    std::optional<Settlement> settled;    // of the codes on the chip; empty again once they move
    bool moved = false;                   // codes went out that are not settled yet
    std::optional<Codes> last_written;    // by apply, or by a restore at a later contact
    std::optional<NoiseChosen> noise;     // empty: the declared noise holds
    std::vector<std::string> items_left;  // of the preflight, begun and not concluded
    std::uint32_t reset_count = 0;
    std::uint32_t codes_changed = 0;  // times that they changed without us
    bool searched = false;            // the strategy has asked for a reading

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
    std::int64_t resumed_by = 0;           // pid of the last one
    std::vector<PreflightItem> preflight;  // the latest of each name and lane, in order of storing

    // Of the whole board where `lane` is empty; null: not concluded.
    const PreflightItem* item(const std::string& name, std::optional<Lane> lane = {}) const;
    // The measured one of that name, on whichever lane or from whichever run; null: there is none.
    const PreflightItem* measured_item(const std::string& name) const;

    void apply(const StoredEvent& stored);
    // No further reading is to be taken: every lane of the run is finished.
    bool complete(const std::vector<std::uint16_t>& run_lanes) const;

  private:
    void take_item(const PreflightItem& item);

    std::map<std::pair<std::uint16_t, std::uint32_t>, std::pair<Stage, std::string>> intents_;
};

// What the reference code of a lane told, compared with its first reading.
struct ReferenceReading {
    std::uint32_t after_readings = 0;  // of the search
    std::int64_t at_ns = 0;
    std::optional<EdgeShift> shift;  // empty: none that is significant
};
std::vector<ReferenceReading> reference_readings(const LaneState& lane,
                                                 const MonitorNoise& declared, bool latched);

RunState fold(const std::vector<StoredEvent>& events);

// The tuned values of a saved lane, in order.
Codes codes_of(const SavedLane& saved);
// The same lane with other codes: what is to be written when those are to stay.
SavedLane with_codes(SavedLane saved, const Codes& codes);

}  // namespace lanewright
