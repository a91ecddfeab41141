#include "adapt/stats/q_scale.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <numbers>

#include "adapt/stats/normal.hpp"

namespace lanewright {
namespace {

double density(double q) {
    return std::exp(-0.5 * q * q) / std::sqrt(2 * std::numbers::pi);
}

// Density over tail. Far out both vanish, and the ratio is q + 1/q but for terms in q^-3
// (Abramowitz & Stegun 26.2.12).
double hazard(double q) {
    if (q > 25) return q + 1 / q;
    return density(q) / normal_tail(q);
}

// The square roots of two Poisson values differ by a nearly normal value of sigma 1/2.
double root_distance(double errors, double bits, double q) {
    return 2 * (std::sqrt(errors) - std::sqrt(bits * normal_tail(q)));
}

}  // namespace

Pull pull_of(double errors, double bits, bool at_least, double q) {
    const double phi = density(q);
    if (at_least) {
        const double away = root_distance(errors, bits, q);
        const double expected = std::max(bits * normal_tail(q), 1e-12);
        const double rise = bits * phi / std::sqrt(expected);  // of the distance with q
        const double press = hazard(away);
        return {-press * rise, std::max(press * (press - away), 0.0) * rise * rise};
    }
    const double tail = normal_tail(q);
    const double steep = q > 25 ? hazard(q) : phi / tail;
    const double good = (bits - errors) * phi / (1 - tail);
    return {good - errors * steep, errors * steep * (steep - q) + good * (q + phi / (1 - tail))};
}

double log_likelihood_of(double errors, double bits, bool at_least, double q) {
    if (at_least) return log_normal_tail(root_distance(errors, bits, q));
    return errors * log_normal_tail(q) + (bits - errors) * std::log1p(-normal_tail(q));
}

double expected_information(double bits, double q) {
    const double phi = density(q);
    const double tail = normal_tail(q);
    const double steep = q > 25 ? hazard(q) : phi / tail;
    return bits * steep * phi / (1 - tail);
}

Measured carried_edge(const Measured& edge, const Measured& slope, double from_ratio,
                      double to_ratio) {
    const double further = normal_q(to_ratio) - normal_q(from_ratio);
    if (further == 0) return edge;
    Measured carried = edge;
    if (slope.bound != Bound::exact) {
        // Not told: nothing is known at another ratio but the side that the edge moves to.
        carried.std_error = std::numeric_limits<double>::infinity();
        return carried;
    }
    carried.value -= slope.value * further;
    const double together = edge.std_error + std::abs(further) * slope.std_error;
    const double bend = 0.5 * bend_per_q * further * further * slope.value;
    carried.std_error = std::hypot(together, bend);
    return carried;
}

double log_interval_likelihood(double low, double high, double truth, double sigma) {
    constexpr double infinity = std::numeric_limits<double>::infinity();
    if (!(high > low)) return -infinity;
    if (!(sigma > 0)) return truth >= low && truth <= high ? 0 : -infinity;
    double near = (low - truth) / sigma, far = (high - truth) / sigma;
    // On the side where both tails are small their difference keeps its digits.
    if (near + far < 0) {
        const double swap = near;
        near = -far;
        far = -swap;
    }
    const double log_near = log_normal_tail(near);
    if (far == infinity) return log_near;
    return log_near + std::log1p(-std::exp(log_normal_tail(far) - log_near));
}

}  // namespace lanewright
