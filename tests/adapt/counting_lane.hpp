#pragma once
// Purpose:   a lane read by a counting monitor, for tests and benches of readings out of counts:
//            edges of published form (Gaussian, two Diracs, mixtures by interference of several
//            symbols), a monitor whose positions are off, and counts drawn by key. No physics of a
//            link, just stated numbers; shares no code with what it tests but the normal tail.
// Ownership: values only.
// Threads:   const calls from any thread.

#include <array>
#include <cstdint>
#include <optional>
#include <span>
#include <vector>

#include "adapt/margin/edge_search.hpp"
#include "adapt/values/values.hpp"

namespace lanewright::tests {

enum class EdgeShape : std::uint8_t { gaussian, two_diracs, mixture };

struct CountingLane {
    // What the ones are: level plus or minus each of the interferences, with noise; zeros mirrored.
    double level_mv = 60, noise_mv = 4, decision_mv = 0;
    std::vector<double> interference_mv;
    // Crossings half a unit interval away, moved to either side by half of `deterministic`.
    double random_jitter_ui = 0.01, deterministic_jitter_ui = 0.1;

    // The monitor: real steps are `gain` nominal ones, and every position is off by a draw.
    double gain = 1, nonlinearity_steps = 0;
    // Share of readings in which one look goes wrong: a burst adds thousands of errors, or a slip
    // makes half of them errors.
    double spoilt_readings = 0;
    ErrorDefinition definition = ErrorDefinition::pattern;
    std::uint64_t seed = 1;
    std::uint32_t lane = 0;

    // Share of wrong bits at nominal distances from the decision point, in steps of the grid.
    double ratio_at(const LookGrid& grid, double offset_steps, double phase_steps) const;
    // The nominal distance at which the ratio is first reached, in steps outwards; the range where
    // it is not. direction: 0 up, 1 down, 2 left, 3 right.
    double true_edge_steps(const LookGrid& grid, std::size_t direction, double ratio) const;
    // Where the ones (0) or the zeros (1) reach the ratio, as a signed distance from the decision
    // point through a perfect monitor.
    double true_level_mv(std::size_t side, double ratio) const;
    double centre_ratio() const;

    // What one look counts. `shift_*`: how far the whole monitor is off in this reading.
    struct Shift {
        double offset_steps = 0, phase_steps = 0;
    };
    Count count(const LookGrid& grid, const Look& look, std::uint32_t nth,
                const Shift& shift) const;

  private:
    double lost(double below_mv) const;
    double height_ratio(double offset_mv) const;
    double width_ratio(double phase_ui) const;
    double moved(double steps, std::uint32_t axis) const;
};

// Lanes that are alike in nothing but their kind, drawn by number.
CountingLane drawn_lane(EdgeShape shape, std::uint64_t seed, std::uint32_t number, double ratio);

// The demo chip's kind of monitor: 2 mV and 1/64 UI.
LookGrid demo_grid();

struct CountedReading {
    Reading reading;
    std::size_t looks = 0, rounds = 0;
};

// Runs one reading to its end; fails by returning nothing if it takes more looks than allowed.
std::optional<CountedReading> read(const CountingLane& lane, const LookGrid& grid,
                                   const MarginWanted& wanted, std::uint32_t ordinal,
                                   std::size_t at_most = 8);

// The least standard error, in steps, that any unbiased estimate can have of an edge from the same
// looks, for a line on the Q scale with positions off as declared (Cramer, Mathematical Methods of
// Statistics, 1946; with random positions: the best linear prediction). Nothing where the looks
// leave the line open.
std::optional<double> least_error_steps(const CountingLane& lane, const LookGrid& grid,
                                        std::span<const Count> counts, std::size_t direction,
                                        double ratio);

}  // namespace lanewright::tests
