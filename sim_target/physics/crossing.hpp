#pragma once
// Purpose:   where a function of one variable goes through zero, between two points that are known
//            to lie on either side.
// Ownership: none.  Threads: a pure function of what it calls.
// Source:    regula falsi with the Illinois correction, Dowell and Jarratt, BIT 11 (1971) 168-174.

#include <cmath>

namespace lanewright::sim {

struct CurvePoint {
    double x = 0, y = 0;
};

// y of the two ends must differ in sign. Ends after at most 60 calls.
template <class Function>
double crossing(const Function& function, CurvePoint from, CurvePoint to, double x_tolerance) {
    int kept = 0;  // how often the same end has stayed: +1, +2 for `to`, -1, -2 for `from`
    for (int step = 0; step < 60 && std::abs(to.x - from.x) > x_tolerance; ++step) {
        double x = (from.x * to.y - to.x * from.y) / (to.y - from.y);
        const bool inside = (x - from.x) * (x - to.x) < 0;
        if (!inside) x = 0.5 * (from.x + to.x);
        const double y = function(x);
        if (std::abs(x - from.x) < x_tolerance && std::abs(y) < std::abs(from.y) * 1e-3) return x;
        if (y == 0) return x;
        if ((y > 0) == (to.y > 0)) {
            to = {x, y};
            kept = kept < 0 ? kept - 1 : -1;
            if (kept <= -2) from.y *= 0.5;
        } else {
            from = {x, y};
            kept = kept > 0 ? kept + 1 : 1;
            if (kept >= 2) to.y *= 0.5;
        }
    }
    // The end with the smaller value is nearer to the root.
    return std::abs(to.y) < std::abs(from.y) ? to.x : from.x;
}

}  // namespace lanewright::sim
