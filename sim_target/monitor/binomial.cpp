#include "sim_target/monitor/binomial.hpp"

#include <algorithm>
#include <array>
#include <cmath>

namespace lanewright::sim {

namespace {

constexpr double least_for_rejection = 10;

double by_inversion(double bits, double share, KeyedRandom& random) {
    const double odds = share / (1.0 - share);
    double probability = std::exp(bits * std::log1p(-share));
    double left = random.uniform();
    double errors = 0;
    // With fewer than ten expected, more than a hundred and ten have a probability below 1e-70.
    while (left > probability && errors < bits && errors < 110) {
        left -= probability;
        ++errors;
        probability *= odds * (bits - errors + 1.0) / errors;
    }
    return errors;
}

// What Stirling's formula leaves out of ln(k!).
double stirling_rest(double k) {
    constexpr std::array<double, 10> small = {
        0.0810614667953272,  0.0413406959554092, 0.0276779256849983, 0.0207906721037650,
        0.0166446911898211,  0.0138761288230707, 0.0118967099458917, 0.0104112652619720,
        0.00925546218271273, 0.00833056343336287};
    if (k < 10) return small[static_cast<std::size_t>(k)];
    const double square = (k + 1.0) * (k + 1.0);
    return (1.0 / 12 - (1.0 / 360 - 1.0 / 1260 / square) / square) / (k + 1.0);
}

double by_rejection(double n, double p, KeyedRandom& random) {
    const double deviation = std::sqrt(n * p * (1.0 - p));
    const double b = 1.15 + 2.53 * deviation;
    const double a = -0.0873 + 0.0248 * b + 0.01 * p;
    const double c = n * p + 0.5;
    const double squeeze = 0.92 - 4.2 / b;
    const double odds = p / (1.0 - p);
    const double alpha = (2.83 + 5.1 / b) * deviation;
    const double m = std::floor((n + 1.0) * p);
    for (;;) {
        const double u = random.uniform() - 0.5;
        double v = random.uniform();
        const double us = 0.5 - std::abs(u);
        const double k = std::floor((2.0 * a / us + b) * u + c);
        if (us >= 0.07 && v <= squeeze) return k;
        if (k < 0 || k > n) continue;
        v = std::log(v * alpha / (a / (us * us) + b));
        const double bound = (m + 0.5) * std::log((m + 1.0) / (odds * (n - m + 1.0))) +
                             (n + 1.0) * std::log1p((k - m) / (n - k + 1.0)) +
                             (k + 0.5) * std::log(odds * (n - k + 1.0) / (k + 1.0)) +
                             stirling_rest(m) + stirling_rest(n - m) - stirling_rest(k) -
                             stirling_rest(n - k);
        if (v <= bound) return k;
    }
}

}  // namespace

std::uint64_t binomial(std::uint64_t bits, double share, KeyedRandom& random) {
    if (!(share > 0) || bits == 0) return 0;
    if (share >= 1) return bits;
    const double n = static_cast<double>(bits);
    const bool mirrored = share > 0.5;
    const double p = mirrored ? 1.0 - share : share;
    const double drawn =
        n * p < least_for_rejection ? by_inversion(n, p, random) : by_rejection(n, p, random);
    const auto errors = std::min(bits, static_cast<std::uint64_t>(drawn));
    return mirrored ? bits - errors : errors;
}

}  // namespace lanewright::sim
