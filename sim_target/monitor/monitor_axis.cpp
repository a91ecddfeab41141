#include "sim_target/monitor/monitor_axis.hpp"

#include <algorithm>
#include <cmath>

namespace lanewright::sim {

namespace {

constexpr double largest_error = 0.45;

}  // namespace

MonitorAxis::MonitorAxis(const AxisDraw& draw, KeyedRandom fixed, KeyedRandom positions)
    : step_(draw.step), reach_(draw.reach) {
    centre_ = draw.centre_sigma * fixed.normal();
    gain_ = 1.0 + draw.gain_tolerance * (2.0 * fixed.uniform() - 1.0);
    for (int i = -reach_; i <= reach_; ++i) {
        errors_.push_back(
            std::clamp(draw.position_sigma * positions.normal(), -largest_error, largest_error));
    }
    origin_ = static_cast<int>(std::lround(position(0.0)));
}

double MonitorAxis::error(int position) const {
    if (position < -reach_ || position > reach_) return 0;
    return errors_[static_cast<std::size_t>(position + reach_)];
}

double MonitorAxis::bent(double position) const {
    const double below = std::floor(position);
    const double part = position - below;
    const int first = static_cast<int>(below);
    return position + (1.0 - part) * error(first) + (part > 0 ? part * error(first + 1) : 0.0);
}

double MonitorAxis::place(double position) const {
    return centre_ + gain_ * step_ * bent(position);
}

double MonitorAxis::position(double place) const {
    const double steps = (place - centre_) / (gain_ * step_);
    int first = static_cast<int>(std::floor(steps)) - 1;
    while (first + 1 + error(first + 1) <= steps) ++first;
    const double low = first + error(first), high = first + 1 + error(first + 1);
    return first + (steps - low) / (high - low);
}

}  // namespace lanewright::sim
