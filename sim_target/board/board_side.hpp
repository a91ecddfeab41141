#pragma once
// Purpose:   what a target file says of the board's side: which fields of the register map play
//            which part, how the wire behaves, and what goes wrong on purpose.
// Ownership: values only.
// Threads:   no shared state.

#include <array>
#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <utility>
#include <vector>

#include "drivers/config/json_reader.hpp"
#include "drivers/config/register_description.hpp"
#include "sim_target/board/messages.hpp"

namespace lanewright::sim {

// The part that a field plays in the chip. All but `fixed` and those said to be once a board are
// fields of a lane.
enum class Part : std::uint8_t {
    r1,  // bank codes, in the order of all codes here
    c1,
    r2,
    c2,
    strobe,   // a written one makes the written codes take effect; absent: at once
    trigger,  // a written one starts the monitor
    busy,     // the monitor is at work, for this lane or one that shares it
    closed,   // the last reading found no opening
    lock,     // the receiver has lock
    up,       // latched edges, in steps
    down,
    left,
    right,
    dwell_log2,      // bits of one dwell, as an exponent of two
    ratio_exponent,  // error ratio as 10^-n
    ordinal,         // the reading's number; absent: readings are counted
    offset,          // where the next counted look looks, in steps; the middle is the centre
    phase,
    count,          // a written one starts a counted look
    errors,         // of the last counted look
    saturated,      // more of them than the field holds
    bits,           // as an exponent of two, of the last counted look
    origin_offset,  // the data sampler's decision point, as the chip's alignment finds it
    origin_phase,
    hold_loops,  // the loops stand still while it is one
    loops,       // they run
    pattern_sync,
    inverted,     // the pattern checker sees the wrong polarity
    losses,       // how often lock was lost
    lane_tag,     // which lane this is
    temperature,  // quarter degrees above -64 degrees Celsius; this and the rest once a board
    supply,       // mV
    clock_present,
    clock_ok,
    fixed,  // identity and the like: a value that never changes
    none
};
constexpr std::size_t part_count = static_cast<std::size_t>(Part::fixed);

struct Binding {
    std::array<std::optional<FieldName>, part_count> fields;
    std::map<FieldName, std::uint32_t> fixed;
    std::vector<std::vector<std::uint16_t>> shared_by;  // lanes that share one monitor

    const std::optional<FieldName>& field(Part part) const {
        return fields[static_cast<std::size_t>(part)];
    }
    Part part_of(const FieldName& name) const;  // `none` if it plays none
};

struct WireOptions {
    double latency_us = 0;          // from the end of a request to the first byte of its answer
    std::uint32_t baud = 921600;    // of pseudo-terminals, 10 bits a byte; 0: not limited
    double lock_us = 300;           // from new codes to lock
    double default_dwell_s = 1e-3;  // where no field states the dwell
    BoardLimits limits;
};

enum class Direction : std::uint8_t { to_board, to_host, both };

struct RandomFault {
    double probability = 0;  // of each frame
    Direction direction = Direction::both;
};

struct FaultOptions {
    std::uint64_t seed = 1;
    RandomFault flip, cut, twice, late;
    double late_ms = 500;
    std::vector<std::uint64_t> reset_at_batches;  // counted from 1 since the start
    bool reset_before_batch = false;              // else while it is being carried out
    std::uint64_t silent_from_frame = 0;          // counted from 1; 0: never
    std::uint64_t garbage_from_frame = 0;
    std::uint64_t drop_at_frame = 0;
    double back_after_ms = 0;
    std::map<FieldName, std::uint32_t> wrong_identity;
    std::string console_text;
    double console_probability = 0;  // before a frame to the host
};

struct BoardSide {
    bool declared = false;  // the file has a `board`; else there is nothing to serve
    std::string board_path;
    RegisterMapDescription map;
    Binding binding;
    WireOptions wire;
    FaultOptions faults;
};

// Reads `board`, `binding`, `wire` and `faults`; complains at their places. Paths are relative to
// `folder`, the target file's.
BoardSide decode_board_side(const Object& top, const std::string& folder);

}  // namespace lanewright::sim
