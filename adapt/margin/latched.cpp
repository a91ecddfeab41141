#include "adapt/margin/latched.hpp"

#include <algorithm>
#include <cmath>
#include <numbers>

namespace lanewright {
namespace {

Measured distance(std::int32_t steps, std::int32_t max_steps, double step, double sigma) {
    if (steps <= 0) return {0.5 * step, sigma, Bound::at_most};
    const double std_error = std::sqrt(step * step / 12 + sigma * sigma);
    const bool at_top = steps >= max_steps;
    return {std::min(steps, max_steps) * step, std_error, at_top ? Bound::at_least : Bound::exact};
}

Status status_of(std::initializer_list<Measured> distances) {
    const auto any = [&](Bound bound) {
        return std::any_of(distances.begin(), distances.end(),
                           [&](const Measured& each) { return each.bound == bound; });
    };
    if (any(Bound::at_most)) return Status::closed;
    return any(Bound::at_least) ? Status::saturated : Status::open;
}

Reading blank(const MarginWanted& wanted) {
    Reading reading;
    reading.status = Status::no_lock;
    reading.error_ratio = wanted.error_ratio;
    reading.bit_count = wanted.dwell_bits;
    return reading;
}

}  // namespace

Reading latched_reading(const MonitorGrid& grid, const LatchedEdges& steps,
                        const MarginWanted& wanted) {
    Reading reading = blank(wanted);
    if (!steps.locked) return reading;
    const auto height = [&](std::int32_t count) {
        return distance(count, grid.height_max_steps, grid.height_step_mv, grid.height_sigma_mv);
    };
    const auto width = [&](std::int32_t count) {
        return distance(count, grid.width_max_steps, grid.width_step_ui, grid.width_sigma_ui);
    };
    reading.up_mv = height(steps.up);
    reading.down_mv = height(steps.down);
    reading.left_ui = width(steps.left);
    reading.right_ui = width(steps.right);
    reading.status =
        status_of({*reading.up_mv, *reading.down_mv, *reading.left_ui, *reading.right_ui});
    return reading;
}

Reading latched_reading(const MonitorGrid& grid, const LatchedOpening& steps,
                        const MarginWanted& wanted) {
    Reading reading = blank(wanted);
    reading.centred_assumed = true;
    if (!steps.locked) return reading;
    reading.height_mv = distance(steps.height, grid.height_max_steps, grid.height_step_mv,
                                 std::numbers::sqrt2 * grid.height_sigma_mv);
    reading.width_ui = distance(steps.width, grid.width_max_steps, grid.width_step_ui,
                                std::numbers::sqrt2 * grid.width_sigma_ui);
    reading.status = status_of({*reading.height_mv, *reading.width_ui});
    return reading;
}

}  // namespace lanewright
