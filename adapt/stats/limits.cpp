#include "adapt/stats/limits.hpp"

#include <algorithm>
#include <cmath>
#include <limits>

#include "adapt/stats/normal.hpp"
#include "adapt/stats/tails.hpp"

namespace lanewright {
namespace {

constexpr double not_a_number = std::numeric_limits<double>::quiet_NaN();
constexpr double infinity = std::numeric_limits<double>::infinity();

// Where an increasing function crosses zero inside (0, high]: bisection, by ratio while the
// bracket spans more than a factor of two, so that a limit of 1e-15 is as exact as one of 0.5.
template <class Function>
double crossing(Function increasing, double high) {
    double low = std::numeric_limits<double>::min();
    for (int step = 0; step < 200; ++step) {
        const double middle =
            high > 2 * low ? std::sqrt(low) * std::sqrt(high) : low + 0.5 * (high - low);
        if (!(middle > low) || !(middle < high)) break;
        (increasing(middle) < 0 ? low : high) = middle;
    }
    return high;
}

// The chance left outside each limit, or NaN.
double outside(double confidence, Sides sides) {
    if (!(confidence > 0) || !(confidence < 1)) return not_a_number;
    return sides == Sides::one ? 1 - confidence : (1 - confidence) / 2;
}

// The mean at which a gamma variable of order k lies below it with chance `outside`, or above it.
// Each is solved on the tail that is small there, which keeps its digits.
double gamma_low(double k, double alpha) {
    const double ceiling = k + 10 * std::sqrt(k) + 10;
    return crossing([&](double mean) { return gamma_p(k, mean) - alpha; }, ceiling);
}

double gamma_high(double k, double alpha) {
    double ceiling = k + 10 * std::sqrt(k) + 10;
    while (gamma_q(k, ceiling) > alpha) ceiling *= 2;
    return crossing([&](double mean) { return alpha - gamma_q(k, mean); }, ceiling);
}

double binomial_high(double events, double trials, double alpha) {
    if (events >= trials) return 1;
    return crossing([&](double chance) { return alpha - binomial_at_most(events, trials, chance); },
                    1.0);
}

double binomial_low(double events, double trials, double alpha) {
    if (events <= 0) return 0;
    return crossing(
        [&](double chance) { return binomial_at_least(events, trials, chance) - alpha; }, 1.0);
}

}  // namespace

Limits poisson_limits(std::uint64_t events, double confidence, Sides sides) {
    const double alpha = outside(confidence, sides);
    if (std::isnan(alpha)) return {alpha, alpha};
    const auto count = static_cast<double>(events);
    return {events == 0 ? 0 : gamma_low(count, alpha), gamma_high(count + 1, alpha)};
}

Limits stopped_run_limits(std::uint64_t kth_event, double confidence, Sides sides) {
    const double alpha = outside(confidence, sides);
    if (std::isnan(alpha)) return {alpha, alpha};
    if (kth_event == 0) return {0, infinity};
    const auto order = static_cast<double>(kth_event);
    return {gamma_low(order, alpha), gamma_high(order, alpha)};
}

Limits binomial_limits(std::uint64_t events, std::uint64_t trials, double confidence, Sides sides) {
    const double alpha = outside(confidence, sides);
    if (std::isnan(alpha)) return {alpha, alpha};
    if (trials == 0 || events > trials) return {0, 1};
    const auto count = static_cast<double>(events);
    const auto total = static_cast<double>(trials);
    // A chance near one is found as the small chance of the other outcome.
    if (count > 0.5 * total) {
        return {1 - binomial_high(total - count, total, alpha),
                1 - binomial_low(total - count, total, alpha)};
    }
    return {binomial_low(count, total, alpha), binomial_high(count, total, alpha)};
}

Limits wilson_limits(std::uint64_t events, std::uint64_t trials, double confidence) {
    const double alpha = outside(confidence, Sides::two);
    if (std::isnan(alpha)) return {alpha, alpha};
    if (trials == 0 || events > trials) return {0, 1};
    const auto total = static_cast<double>(trials);
    const double share = static_cast<double>(events) / total;
    const double z = normal_q(alpha);
    const double widening = 1 + z * z / total;
    const double centre = share + z * z / (2 * total);
    const double half = z * std::sqrt(share * (1 - share) / total + z * z / (4 * total * total));
    return {std::max(0.0, (centre - half) / widening), std::min(1.0, (centre + half) / widening)};
}

double fewer_errors_chance(std::uint64_t errors_a, double bits_a, std::uint64_t errors_b,
                           double bits_b) {
    if (!(bits_a > 0) || !(bits_b > 0) || errors_b == 0) return 1;
    const auto few = static_cast<double>(errors_a);
    return binomial_at_most(few, few + static_cast<double>(errors_b), bits_a / (bits_a + bits_b));
}

}  // namespace lanewright
