#pragma once
// Purpose:   what several readings of the same codes tell of their edges: mean and spread, and
//            whether two such sets differ.
// Ownership: pure functions on values.
// Threads:   any.

#include <cstddef>
#include <map>
#include <optional>
#include <span>
#include <string>
#include <vector>

#include "adapt/search/procedure.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

// One edge (or whole opening, where the monitor tells only that) over several readings.
struct EdgeStatistics {
    std::string name;  // up_mv, down_mv, left_ui, right_ui, height_mv or width_ui
    bool vertical = false;
    bool opening = false;  // two edges in one
    std::size_t count = 0;
    double mean = 0, deviations = 0;  // sum of squared deviations from the mean

    double variance() const { return count > 1 ? deviations / static_cast<double>(count - 1) : 0; }
};

// Edges that every reading has as a plain value; none where a reading is not open.
std::vector<EdgeStatistics> edge_statistics(std::span<const Reading> readings);

// A burst or a cycle slip during one reading says nothing of a monitor's repeatability. One reading
// in ten, begun ones counted, may be left out where an edge lies farther from the mean of the
// others than 6 of their standard deviations (with a floor of one step and the declared sigma).
struct Kept {
    std::vector<Reading> readings;
    std::size_t left_out = 0;
};
Kept without_strays(std::span<const Reading> readings, const MonitorNoise& declared);

// One standard deviation of one edge, pooled over the edges of a direction, and its degrees of
// freedom. Of a latching monitor the even spread inside a step, step^2 / 12, is taken off
// (Sheppard, Proc. London Math. Soc. 29, 353-380, 1898).
struct Sigma {
    double value = 0;
    double degrees = 0;
};
Sigma pooled_sigma(const std::vector<EdgeStatistics>& edges, bool vertical, double step);

// The chance that a spread at least as large is seen where the true one is `sigma`, from a sum of
// squares with that many degrees of freedom (chi-square).
double larger_spread_chance(double sum_of_squares, double degrees, double sigma);

// Means, counts and variances under their names, for an item's values: up_mv, up_variance_mv2, ...;
// and back.
std::map<std::string, double> values_of(const std::vector<EdgeStatistics>& edges);
std::vector<EdgeStatistics> edges_from(const std::map<std::string, double>& values);

// The edge that differs most between two readings, in standard errors of the difference.
struct EdgeShift {
    std::string edge;
    double before = 0, now = 0;
    double standard_errors = 0;
    bool gone = false;  // it was open, and is not any more: no edge to compare
};

// Set where the shift is significant at 95 %, all edges taken together (Bonferroni). `noise` is one
// edge's repeatability; of latching monitors the step comes on top, of counting ones the reading's
// own standard error is taken where it is larger. A counted eye that was open and is closed is
// compared by its vertical edges, which are signed; any other is gone.
std::optional<EdgeShift> significant_shift(const Reading& before, const Reading& now,
                                           const MonitorNoise& noise, bool latched);

// "the up edge from 61.2 mV to 57.9 mV, 3.1 standard errors"
std::string text_of(const EdgeShift& shift);

}  // namespace lanewright
