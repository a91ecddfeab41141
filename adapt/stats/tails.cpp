#include "adapt/stats/tails.hpp"

#include <cmath>
#include <limits>
#include <numbers>

namespace lanewright {
namespace {

constexpr double not_a_number = std::numeric_limits<double>::quiet_NaN();
constexpr double epsilon = 1e-16;
constexpr double tiny = 1e-300;        // keeps Lentz's method clear of a division by zero
constexpr int most_terms = 5'000'000;  // about six standard deviations at a count of 1e11
constexpr double two_pi = 2.0 * std::numbers::pi;

// ln(n!) minus Stirling's formula; the series is exact to the last digit from 15 on.
double stirling_error(double n) {
    if (n < 15) {
        return log_gamma(n + 1) - (n + 0.5) * std::log(n) + n - 0.5 * std::log(two_pi);
    }
    const double square = n * n;
    return (1.0 / 12 -
            (1.0 / 360 - (1.0 / 1260 - (1.0 / 1680 - 1.0 / 1188 / square) / square) / square) /
                square) /
           n;
}

// a ln(a/x) + x - a, without cancellation where a and x are close (Loader 2000).
double deviance(double a, double x) {
    const double difference = a - x;
    if (std::abs(difference) >= 0.1 * (a + x)) return a * std::log(a / x) + x - a;
    const double v = difference / (a + x);
    double sum = difference * v;
    double term = 2 * a * v;
    for (int j = 1; j < 1000; ++j) {
        term *= v * v;
        const double next = sum + term / (2 * j + 1);
        if (next == sum) break;
        sum = next;
    }
    return sum;
}

double gamma_series(double a, double x) {
    double term = 1, sum = 1;
    for (int n = 1; n < most_terms; ++n) {
        term *= x / (a + n);
        sum += term;
        if (term < sum * epsilon) break;
    }
    return sum * poisson_term(a, x);
}

double gamma_fraction(double a, double x) {
    double b = x + 1 - a;
    double c = 1 / tiny;
    double d = 1 / (std::abs(b) < tiny ? tiny : b);
    double value = d;
    for (int n = 1; n < most_terms; ++n) {
        const double numerator = -n * (n - a);
        b += 2;
        d = numerator * d + b;
        if (std::abs(d) < tiny) d = tiny;
        c = b + numerator / c;
        if (std::abs(c) < tiny) c = tiny;
        d = 1 / d;
        const double factor = d * c;
        value *= factor;
        if (std::abs(factor - 1) < epsilon * 2) break;
    }
    return value * a * poisson_term(a, x);
}

// The binomial probability of exactly k in n, in Loader's saddle-point form.
double binomial_term(double k, double n, double chance) {
    if (chance <= 0) return k == 0 ? 1 : 0;
    if (chance >= 1) return k == n ? 1 : 0;
    if (k == 0) return std::exp(n * std::log1p(-chance));
    if (k == n) return std::exp(n * std::log(chance));
    const double log_term = stirling_error(n) - stirling_error(k) - stirling_error(n - k) -
                            deviance(k, n * chance) - deviance(n - k, n * (1 - chance));
    return std::exp(log_term) * std::sqrt(n / (two_pi * k * (n - k)));
}

// Sum from k downwards, for k below the mean.
double sum_downwards(double k, double n, double chance) {
    double term = 1, sum = 1;
    for (double j = k; j > 0 && term > sum * epsilon; --j) {
        term *= j * (1 - chance) / ((n - j + 1) * chance);
        sum += term;
    }
    return sum * binomial_term(k, n, chance);
}

// Sum from k upwards, for k above the mean.
double sum_upwards(double k, double n, double chance) {
    double term = 1, sum = 1;
    for (double j = k; j < n && term > sum * epsilon; ++j) {
        term *= (n - j) * chance / ((j + 1) * (1 - chance));
        sum += term;
    }
    return sum * binomial_term(k, n, chance);
}

bool valid(double events, double trials, double chance) {
    return events >= 0 && events <= trials && chance >= 0 && chance <= 1;
}

}  // namespace

double log_gamma(double x) {
    if (!(x > 0)) return not_a_number;
    double product = 1;
    while (x < 15) {
        product *= x;
        x += 1;
    }
    // ln Gamma(x) = ln((x-1)!) and (x-1)! = x!/x.
    return (x - 0.5) * std::log(x) - x + 0.5 * std::log(two_pi) + stirling_error(x) -
           std::log(product);
}

double poisson_term(double a, double x) {
    if (!(a > 0) || !(x > 0)) return not_a_number;
    return std::exp(-stirling_error(a) - deviance(a, x)) / std::sqrt(two_pi * a);
}

double gamma_p(double a, double x) {
    if (!(a > 0) || !(x >= 0)) return not_a_number;
    if (x == 0) return 0;
    return x < a + 1 ? gamma_series(a, x) : 1 - gamma_fraction(a, x);
}

double gamma_q(double a, double x) {
    if (!(a > 0) || !(x >= 0)) return not_a_number;
    if (x == 0) return 1;
    return x < a + 1 ? 1 - gamma_series(a, x) : gamma_fraction(a, x);
}

double binomial_at_most(double events, double trials, double chance) {
    if (!valid(events, trials, chance)) return not_a_number;
    if (events == trials) return 1;
    if (events < trials * chance) return sum_downwards(events, trials, chance);
    return 1 - sum_upwards(events + 1, trials, chance);
}

double binomial_at_least(double events, double trials, double chance) {
    if (!valid(events, trials, chance)) return not_a_number;
    if (events == 0) return 1;
    if (events > trials * chance) return sum_upwards(events, trials, chance);
    return 1 - sum_downwards(events - 1, trials, chance);
}

}  // namespace lanewright
