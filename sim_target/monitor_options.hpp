#pragma once
// Purpose:   what a target file says of the eye monitor, of lock, of what a write of codes does, of
//            the chip's own measurements, and of what is broken on purpose: "monitor", "lock",
//            "write_effects", "telemetry" and "failures".
// Ownership: values only.
// Threads:   no shared state.
// Every default but the steps and the cost is "no such effect".

#include <array>
#include <cstdint>
#include <limits>
#include <string>
#include <utility>
#include <vector>

#include "drivers/config/json_reader.hpp"

namespace lanewright::sim {

// What a counting monitor compares its sampler with.
enum class ErrorsAgainst : std::uint8_t { pattern, decision };

struct MonitorOptions {
    // Nominal steps; a latched reading's counters stop at their most steps.
    double height_step_mv = 2;
    double width_step_ui = 1.0 / 64.0;
    int height_steps_max = 255;
    int width_steps_max = 31;
    double error_ratio = 1e-6;  // of latched edges, where no field states it
    ErrorsAgainst against = ErrorsAgainst::pattern;

    // Fixed for a lane: where the monitor's centre lies, seen from the data sampler's decision
    // point, its steps' true size (even within the tolerance), and each position's own error.
    double offset_sigma_mv = 0, phase_sigma_ui = 0;
    double gain_tolerance = 0;
    double nonlinearity_steps = 0;

    // One standard deviation of an edge: anew with each look, and wandering in bench time with
    // the correlation time given.
    double height_sigma_mv = 0, width_sigma_ui = 0;
    double height_drift_mv = 0, width_drift_ui = 0;
    double drift_time_s = 400;

    double deterministic_jitter_ui = 0;  // of the monitor's clock, between its two places
    double event_share = 0;  // readings with a burst or, as often, a slip of the checker

    // What a reading is charged with beside its dwell: once, and a look.
    double settle_s = 1e-3, per_look_s = 2e-4;
};

struct LockOptions {
    // Spread of the waveform's crossings; between the two, lock stays as it is.
    double lost_above_ui = std::numeric_limits<double>::infinity();
    double regained_below_ui = std::numeric_limits<double>::infinity();
    double landing_sigma_ui = 0;  // of the sampling phase after lock was lost and found again
    double wander_sigma_ui = 0;   // of the sampling phase, slowly
    double wander_time_s = 120;
};

struct WriteEffects {
    double settle_time_s = 0;  // time constant of the way to a new value after the strobe
    double settle_mv = 0;      // how far off the threshold is at the strobe
    // Each stay at a code is off by so much, one standard deviation.
    double return_offset_mv = 0;
    double return_gain = 0;  // relative
    // Of the sampling phase where codes change while the loops run, one standard deviation.
    double unheld_landing_ui = 0;
};

struct Telemetry {
    double temperature_error_c = 0;  // of the sensor
    double supply_mv = 900;
};

enum class ReferenceClock : std::uint8_t { good, off, absent };

// Something else writes a bank's code in the middle of these batches, counted from 1.
struct ForeignWrite {
    std::uint16_t lane = 0;
    int dimension = 0;  // in the order of all codes here
    std::uint32_t code = 0;
    std::vector<std::uint64_t> at_batches;
};

struct FailureSwitches {
    using Lanes = std::vector<std::uint16_t>;
    ReferenceClock clock = ReferenceClock::good;
    Lanes no_lock, out_of_sync, inverted, loops_off;
    std::vector<std::pair<std::uint16_t, std::uint16_t>> swapped;
    Lanes too_few_errors;  // far outside the eye
    Lanes not_monotone;    // half of the errors missed at every other group of positions
    Lanes wrong_bits;      // an eighth of the bits that the dwell says
    double repeatability_times = 1, return_error_times = 1, settle_times = 1;
    double parallel_offset_mv = 0;  // while another lane's monitor is at work
    std::vector<ForeignWrite> foreign_writes;

    static bool holds(const Lanes& lanes, int lane);
};

struct ChipOfTarget {
    LockOptions lock;
    WriteEffects write_effects;
    Telemetry telemetry;
    FailureSwitches failures;
};

// Each reads one section and complains at its places.
MonitorOptions read_monitor_options(const Object& from);
// "lock", "write_effects", "telemetry" and "failures", where the file has them. `lanes`: how many
// the target has; `codes`: how many each bank has.
ChipOfTarget read_chip_options(const Object& top, std::size_t lanes,
                               const std::array<int, 4>& codes);

}  // namespace lanewright::sim
