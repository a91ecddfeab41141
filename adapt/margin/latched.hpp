#pragma once
// Purpose:   turns the step counts that a latching eye monitor holds into a reading: distances in
//            mV and UI, each with its standard error and with what the monitor could not see.
// Ownership: pure functions on values.
// Threads:   any.
//
// A count of n steps is taken as the nearest step, so the true distance lies within half a step
// of n steps; a monitor that rounds down then reads low by half a step, on the safe side.
// The standard error joins the even spread inside one step, step^2 / 12, and the declared
// repeatability.

#include <cstdint>

#include "adapt/values/values.hpp"

namespace lanewright {

// What the board file declares of the monitor.
struct MonitorGrid {
    double height_step_mv = 0, width_step_ui = 0;
    std::int32_t height_max_steps = 0, width_max_steps = 0;  // where the counters stop
    double height_sigma_mv = 0, width_sigma_ui = 0;          // repeatability of one edge, 1 sigma
};

// Latched distances from the decision point to each edge.
struct LatchedEdges {
    std::int32_t up = 0, down = 0, left = 0, right = 0;
    bool locked = true;
};

// A monitor that tells only the whole opening.
struct LatchedOpening {
    std::int32_t height = 0, width = 0;
    bool locked = true;
};

// The reading behind latched counts taken at `wanted.error_ratio` with `wanted.dwell_bits` of
// dwell. Codes, condition and cost are left for the caller, who knows them.
//   no lock:        status no_lock, no edges.
//   0 steps:        that edge is at most half a step; status closed.
//   at the maximum: that edge is at least that far; status saturated (unless another is closed).
// Counts below 0 are taken as 0 and counts above the maximum as the maximum.
Reading latched_reading(const MonitorGrid& grid, const LatchedEdges& steps,
                        const MarginWanted& wanted);

// The same where only height and width are latched: the four edges stay absent and the eye is
// taken as centred on the decision point (`centred_assumed`). Both edges blur an opening, so its
// repeatability is sqrt 2 times that of one edge; it is one count, so its step enters once.
Reading latched_reading(const MonitorGrid& grid, const LatchedOpening& steps,
                        const MarginWanted& wanted);

}  // namespace lanewright
