#pragma once
// Purpose:   one of the four directions of an EdgeSearch: where to look next along it, and the edge
//            that its counts make.
// Ownership: owns its counts.
// Threads:   one caller at a time.

#include <cstdint>
#include <optional>

#include "adapt/margin/edge_fit.hpp"
#include "adapt/margin/edge_looks.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

// What all directions of one reading have in common, worked out from the dwell and the grid.
struct LookPlan {
    double ratio = 0, wanted_q = 0, decade_q = 0;  // at which edges are stated; ten times that
    double short_bits = 0, long_bits = 0;          // of a first look, and the most of any
    double goal_errors = 0;                        // that make a count good enough
};

// A position and the bits to spend there, before they are rounded to what the monitor can do.
struct Wish {
    std::int32_t steps = 0;
    double bits = 0;
};

class EdgeSide {
  public:
    struct Range {
        std::int32_t reach = 1;        // steps
        double first_steps = 1;        // where to begin if nothing is expected
        std::int32_t likely_most = 1;  // hardly any edge lies beyond
        double step = 0, sigma = 0;    // of one step, and repeatability, in the result's unit
        double nonlinearity_steps = 0;
        bool sees_centre = true;  // counts at the decision point mean something
    };
    EdgeSide() = default;
    EdgeSide(const LookPlan& plan, const Range& range) : plan_(plan), range_(range) {}

    // Where the edge may lie and how fast Q falls there, both in steps; 0: not known.
    void expect(double edge_steps, double fall);
    void add(const Seen& seen);
    // After counts or expectations were added: fits, and makes up its mind where to look next.
    void settle();

    // The next look; empty where another one would tell little.
    const std::optional<Wish>& next() const { return next_; }
    bool begun() const { return taken_ > 0; }
    std::size_t taken() const { return taken_; }
    const EdgeLooks& looks() const { return looks_; }

    // Fitted to counts that tell one; empty where there are none.
    const std::optional<EdgeFit>& fit() const { return fit_; }
    // The first position outwards is too bad already, or the edge seems to lie before it.
    bool collapsed() const;
    double likely_fall() const;

    Measured edge() const;
    Measured slope() const;  // distance per unit of Q; "at least 0" where it was not told

  private:
    struct Bracket {
        std::optional<std::int32_t> good, bad;
    };
    std::optional<Wish> find_next() const;
    Bracket bracket() const;
    std::optional<Wish> narrow(const Bracket& between) const;
    std::optional<Wish> refine() const;
    std::optional<Wish> second_position(double bits) const;
    EdgeModel model() const;
    double bits_at(double steps) const;

    LookPlan plan_;
    Range range_;
    EdgeLooks looks_;
    std::size_t taken_ = 0;  // without the centre, which all directions share
    double expected_ = 0, expected_fall_ = 0;
    std::optional<EdgeFit> fit_;
    std::optional<Wish> next_;
    bool stale_ = true, recount_ = false;  // next_; the counts behind fit_
};

}  // namespace lanewright
