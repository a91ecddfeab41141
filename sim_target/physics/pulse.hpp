#pragma once
// Purpose:   one window of a pulse response, circular, with its values and slopes between samples.
// Ownership: a Pulse owns its samples.
// Threads:   const calls may run at the same time.

#include <span>
#include <vector>

#include "sim_target/physics/channel.hpp"

namespace lanewright::sim {

class Pulse {
  public:
    explicit Pulse(const Grid& grid) : grid_(grid) {}

    // grid.samples() values, samples_per_ui a unit interval.
    void assign(std::span<const double> samples_mv);

    // By Lagrange's cubic through the four nearest samples; any phase, the window goes round.
    double at(double phase_ui) const;

    // Value and slope (per unit interval) one unit interval apart, starting at the phase; both
    // spans have grid.window_ui places. Place k is what the symbol k unit intervals earlier adds
    // now; the last place is that of the next symbol.
    void take(double phase_ui, std::span<double> values, std::span<double> slopes) const;

    // Half a unit interval after the median crossing. The symbols around a transition are symmetric
    // about zero, so the median of the waveform there is p(t − T) − p(t) and the crossing is where
    // these two are equal. In unit intervals from the start of the window; of several the one with
    // the largest value.
    double recovered_phase_ui() const;

    const Grid& grid() const { return grid_; }

  private:
    Grid grid_;
    std::vector<double> samples_;
};

}  // namespace lanewright::sim
