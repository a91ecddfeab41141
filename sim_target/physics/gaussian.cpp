#include "sim_target/physics/gaussian.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <numbers>

namespace lanewright::sim {

namespace {

constexpr double table_reach = 12.0;
constexpr double table_steps = 64.0;  // a unit
constexpr std::size_t table_size = static_cast<std::size_t>(2 * table_reach * table_steps) + 1;

struct TablePoint {
    double tail, density;
};

std::array<TablePoint, table_size> make_table() {
    std::array<TablePoint, table_size> table{};
    for (std::size_t i = 0; i < table_size; ++i) {
        const double x = static_cast<double>(i) / table_steps - table_reach;
        table[i] = {gaussian_tail(x), std::exp(-0.5 * x * x) / std::sqrt(2.0 * std::numbers::pi)};
    }
    return table;
}

}  // namespace

// Taylor's series from the nearest point of the table, at most 1/128 away; the derivatives of the
// density are Hermite's polynomials times itself.
double quick_gaussian_tail(double x) {
    if (!(std::abs(x) < table_reach - 1.0 / table_steps)) return gaussian_tail(x);
    static const std::array<TablePoint, table_size> table = make_table();
    // Rounded by hand: the library's rounding is a call.
    const auto index = static_cast<std::size_t>((x + table_reach) * table_steps + 0.5);
    const TablePoint& point = table[index];
    const double a = static_cast<double>(index) * (1.0 / table_steps) - table_reach;
    const double d = x - a;
    const double a2 = a * a;
    const double series =
        d * (1.0 -
             d * (a / 2.0 - d * ((a2 - 1.0) / 6.0 - d * (a * (a2 - 3.0) / 24.0 -
                                                         d * (a2 * a2 - 6.0 * a2 + 3.0) / 120.0))));
    return point.tail - point.density * series;
}

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
