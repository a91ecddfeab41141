#pragma once
// Purpose:   one edge out of counts: where the error ratio wanted is reached, and how steep Q falls
//            there.
// Ownership: pure functions on values.
// Threads:   any.
//
// Q along the edge is a line with a slight bend, seen through positions each of which may be off by
// the declared non-linearity. Line, bend and positions are jointly Gaussian before anything is
// counted (line: next to nothing known), the counts are binomial: the most probable line is found
// by Newton's method, and its uncertainty is the curvature there (Laplace's approximation; for
// latent Gaussian values: Rasmussen & Williams, Gaussian Processes for Machine Learning, 2006,
// 3.4). The edge is where Q *as the monitor shows it* crosses, between two positions by linear
// interpolation: counts right beside it so need no allowance for non-linearity.

#include <array>
#include <cstddef>
#include <cstdint>
#include <span>

#include "adapt/margin/edge_looks.hpp"

namespace lanewright {

struct EdgeModel {
    double wanted_q = 0;            // of the error ratio at which the edge is stated
    double decade_q = 0;            // of ten times that ratio
    double likely_fall = 0.5;       // Q per step, where the counts don't tell
    double nonlinearity_steps = 0;  // 1 sigma
    double scatter_steps = 0;       // of one look's place, 1 sigma, anew with each
    double least_steps = 0;         // no edge lies before it
};

struct EdgeFit {
    bool slope_known = false;  // counted at two positions at least
    double edge_steps = 0, edge_error = 0;
    double decade_steps = 0, decade_error = 0;  // the same at ten times the error ratio
    double fall = 0, fall_error = 0;            // of Q per step, at the edge

    double q_at(double steps, double wanted_q) const {
        return wanted_q - fall * (steps - edge_steps);
    }
};

// Most positions that a fit takes: those nearest to the error ratio wanted.
constexpr std::size_t most_fitted = 8;

// Whether counts at a position tell a Q: some errors, but clearly fewer than far outside.
bool tells(const Seen& seen);

// At least one position must tell a Q; others with no errors bound it from below.
EdgeFit fit_edge(std::span<const Seen> seen, const EdgeModel& model);

// What one more look would leave of the edge's variance, at the ratio wanted and at ten times it,
// added up, in steps squared.
class Foresight {
  public:
    Foresight(std::span<const Seen> seen, const EdgeModel& model, const EdgeFit& fit);
    // With one more look of so many bits at that position; 0 bits: as it is.
    double variance(std::int32_t steps, double more_bits) const;

  private:
    struct Known {
        double steps = 0, information = 0;
    };
    EdgeModel model_;
    EdgeFit fit_;
    std::array<Known, most_fitted> known_;
    std::size_t count_ = 0;
};

}  // namespace lanewright
