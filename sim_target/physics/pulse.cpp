#include "sim_target/physics/pulse.hpp"

#include <algorithm>
#include <array>
#include <cmath>

#include "sim_target/physics/crossing.hpp"

namespace lanewright::sim {

namespace {

// Lagrange's polynomial through four neighbouring samples, for a point between the middle two.
std::array<double, 4> cubic_weights(double part) {
    const double a = part + 1.0, b = part, c = part - 1.0, d = part - 2.0;
    return {-b * c * d / 6.0, a * c * d / 2.0, -a * b * d / 2.0, a * b * c / 6.0};
}

// The same polynomial's slope per sample.
std::array<double, 4> slope_weights(double part) {
    const double a = part + 1.0, b = part, c = part - 1.0, d = part - 2.0;
    return {-(b * c + b * d + c * d) / 6.0, (a * c + a * d + c * d) / 2.0,
            -(a * b + a * d + b * d) / 2.0, (a * b + a * c + b * c) / 6.0};
}

struct Position {
    std::size_t sample;  // the one before the two around the point
    double part;         // of the way from the first of the two to the second
    std::array<double, 4> weight;
};

Position position_of(double phase_ui, const Grid& grid) {
    const double samples = phase_ui * static_cast<double>(grid.samples_per_ui);
    const double whole = std::floor(samples);
    const auto length = static_cast<long long>(grid.samples());
    long long first = (static_cast<long long>(whole) - 1) % length;
    if (first < 0) first += length;
    const double part = samples - whole;
    return {static_cast<std::size_t>(first), part, cubic_weights(part)};
}

}  // namespace

void Pulse::assign(std::span<const double> samples_mv) {
    samples_.assign(samples_mv.begin(), samples_mv.end());
}

double Pulse::at(double phase_ui) const {
    const Position at = position_of(phase_ui, grid_);
    const std::size_t mask = grid_.samples() - 1;
    double sum = 0;
    for (std::size_t i = 0; i < 4; ++i) sum += at.weight[i] * samples_[(at.sample + i) & mask];
    return sum;
}

void Pulse::take(double phase_ui, std::span<double> values, std::span<double> slopes) const {
    const Position at = position_of(phase_ui, grid_);
    const std::array<double, 4> slope = slope_weights(at.part);
    const std::size_t mask = grid_.samples() - 1;
    const auto per_ui = static_cast<double>(grid_.samples_per_ui);
    for (std::size_t k = 0; k < grid_.window_ui; ++k) {
        const std::size_t start = at.sample + k * grid_.samples_per_ui;
        double sum = 0, rise = 0;
        for (std::size_t i = 0; i < 4; ++i) {
            const double sample = samples_[(start + i) & mask];
            sum += at.weight[i] * sample;
            rise += slope[i] * sample;
        }
        values[k] = sum;
        slopes[k] = rise * per_ui;
    }
}

// Half a unit interval to either side of the peak the difference of neighbours has opposite signs,
// so there is at least one crossing between.
double Pulse::recovered_phase_ui() const {
    const auto peak = std::max_element(samples_.begin(), samples_.end()) - samples_.begin();
    const auto per_ui = static_cast<double>(grid_.samples_per_ui);
    const double peak_ui = static_cast<double>(peak) / per_ui;
    const auto fall = [&](double phase) { return at(phase + 0.5) - at(phase - 0.5); };

    double best_ui = peak_ui, best_cursor = -1e300;
    CurvePoint before{peak_ui - 0.5, fall(peak_ui - 0.5)};
    for (std::size_t i = 1; i <= grid_.samples_per_ui; ++i) {
        const double phase = peak_ui - 0.5 + static_cast<double>(i) / per_ui;
        const CurvePoint here{phase, fall(phase)};
        if (before.y > 0 && here.y <= 0) {
            const double root = here.y == 0 ? here.x : crossing(fall, before, here, 1e-9);
            const double cursor = at(root);
            if (cursor > best_cursor) {
                best_cursor = cursor;
                best_ui = root;
            }
        }
        before = here;
    }
    return best_ui;
}

}  // namespace lanewright::sim
