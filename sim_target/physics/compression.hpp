#pragma once
// Purpose:   a compressive stage without memory: v / sqrt(1 + (v/knee)²), odd and monotone, unity
//            gain for small signals and never more than the knee.
// Ownership: values only.
// Threads:   no shared state.
// Source:    one of the usual soft limiters; knees of 0.2 to 0.45 V are common practice.

#include <cmath>
#include <limits>

namespace lanewright::sim {

struct Compression {
    double knee_mv = 0;  // 0: none

    bool none() const { return knee_mv <= 0; }
    double value(double mv) const {
        if (none()) return mv;
        const double share = mv / knee_mv;
        return mv / std::sqrt(1.0 + share * share);
    }
    // Of a small signal on top of `mv`.
    double slope(double mv) const {
        if (none()) return 1.0;
        const double share = mv / knee_mv;
        const double sum = 1.0 + share * share;
        return 1.0 / (sum * std::sqrt(sum));
    }
    // What goes in where `mv` comes out; infinite at the knee and beyond.
    double inverse(double mv) const {
        if (none()) return mv;
        const double share = mv / knee_mv;
        if (std::abs(share) >= 1.0)
            return std::copysign(std::numeric_limits<double>::infinity(), mv);
        return mv / std::sqrt(1.0 - share * share);
    }
};

}  // namespace lanewright::sim
