#pragma once
// Purpose:   how far a closed eye is from opening, out of counts at the centre and above and below.
// Ownership: pure functions on values.
// Threads:   any.
//
// At an offset v from the decision point a known-pattern checker counts half of what the ones and
// half of what the zeros lose: ratio(v) = (T(a - f v) + T(b + f v)) / 2 with the normal tail T, the
// normal deviates a and b of the ones and the zeros at the decision point, and the fall f per step
// that both share. Where a or b is short of the deviate wanted, the level that the ones or the
// zeros reach with the error ratio lies on the wrong side of the decision point, by (wanted - a) /
// f: a negative distance.

#include <span>

#include "adapt/margin/edge_looks.hpp"

namespace lanewright {

struct ClosedFit {
    bool solved = false;  // counts at the centre, above and below told the slope
    double up_steps = 0, up_error = 0, down_steps = 0, down_error = 0;
    double fall = 0, fall_error = 0;
};

// `up` and `down` count steps outwards; position 0 may stand in either. Positions with more than
// three bits in ten wrong are left out: half errors tell no slope.
ClosedFit fit_closed(std::span<const Seen> up, std::span<const Seen> down, double wanted_q);

}  // namespace lanewright
