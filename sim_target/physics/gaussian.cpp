#include "sim_target/physics/gaussian.hpp"

#include <algorithm>
#include <cmath>
#include <numbers>

namespace lanewright::sim {

double gaussian_tail(double x) {
    return 0.5 * std::erfc(x / std::numbers::sqrt2);
}

// Newton's method on the logarithm of the tail, which is smooth and concave, from the leading term
// of its asymptotic series.
double gaussian_tail_inverse(double probability) {
    if (probability > 0.5) return -gaussian_tail_inverse(1.0 - probability);
    const double wanted = std::max(probability, 1e-300);
    double x = std::sqrt(-2.0 * std::log(2.0 * wanted));
    for (int step = 0; step < 60; ++step) {
        const double tail = gaussian_tail(x);
        const double density = std::exp(-0.5 * x * x) / std::sqrt(2.0 * std::numbers::pi);
        const double change = tail / density * std::log(tail / wanted);
        x += change;
        if (std::abs(change) < 1e-14 * (1.0 + std::abs(x))) break;
    }
    return x;
}

}  // namespace lanewright::sim
