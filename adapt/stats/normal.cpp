#include "adapt/stats/normal.hpp"

#include <cmath>
#include <limits>
#include <numbers>

namespace lanewright {
namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();

// Mills' ratio (tail over density) by its continued fraction x + 1/(x + 2/(x + 3/...)), taken from
// the far end; Abramowitz & Stegun 26.2.14. For x >= 10, 60 terms are far more than needed.
double mills_ratio(double x) {
    double denominator = x;
    for (int term = 60; term >= 1; --term) denominator = x + term / denominator;
    return 1.0 / denominator;
}

double log_density(double x) {
    return -0.5 * x * x - 0.5 * std::log(2.0 * std::numbers::pi);
}

}  // namespace

double normal_tail(double x) {
    return 0.5 * std::erfc(x / std::numbers::sqrt2);
}

double log_normal_tail(double x) {
    if (x < 10) return std::log(normal_tail(x));
    return log_density(x) + std::log(mills_ratio(x));
}

double normal_q_of_log(double log_ratio) {
    if (std::isnan(log_ratio)) return log_ratio;
    if (log_ratio == -infinity) return infinity;
    if (log_ratio >= 0) return -infinity;
    const double log_half = -std::numbers::ln2;
    if (log_ratio > log_half) return -normal_q(-std::expm1(log_ratio));
    // First guess: Abramowitz & Stegun 26.2.23, good to 4.5e-4; then Newton's method on the
    // logarithm of the tail, which is close to a parabola, so three steps reach the last digits.
    const double t = std::sqrt(-2.0 * log_ratio);
    double x = t - (2.515517 + t * (0.802853 + t * 0.010328)) /
                       (1.0 + t * (1.432788 + t * (0.189269 + t * 0.001308)));
    for (int step = 0; step < 4; ++step) {
        const double log_tail = log_normal_tail(x);
        const double slope = -std::exp(log_density(x) - log_tail);
        x -= (log_tail - log_ratio) / slope;
    }
    return x;
}

double normal_q(double ratio) {
    if (std::isnan(ratio)) return ratio;
    if (ratio <= 0) return infinity;
    if (ratio >= 1) return -infinity;
    if (ratio > 0.5) return -normal_q(1.0 - ratio);
    if (ratio == 0.5) return 0;
    return normal_q_of_log(std::log(ratio));
}

}  // namespace lanewright
