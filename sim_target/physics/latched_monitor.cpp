#include <algorithm>
#include <cmath>

#include "sim_target/physics/keyed_random.hpp"
#include "sim_target/physics/truth.hpp"

namespace lanewright::sim {

LatchedEdges latched_reading(const Oracle& oracle, const std::vector<int>& codes,
                             double error_ratio, std::uint64_t dwell_bits, std::uint64_t seed,
                             int lane, std::uint64_t ordinal) {
    double shown = error_ratio;
    if (dwell_bits > 0) shown = std::max(shown, 1.0 / static_cast<double>(dwell_bits));
    const Margins truth = oracle.margins(codes, std::min(shown, 0.1));
    LatchedEdges edges;
    edges.locked = truth.locked;
    edges.closed = truth.closed || !truth.locked;
    if (edges.closed) return edges;

    const LatchedMonitor& monitor = oracle.monitor();
    std::vector<std::uint64_t> key{static_cast<std::uint64_t>(lane), ordinal};
    for (const int code : codes) key.push_back(static_cast<std::uint64_t>(code));
    key.push_back(0);
    const auto latched = [&](std::uint64_t edge, double value, double sigma, double step, int top) {
        key.back() = edge;
        KeyedRandom random(seed, Purpose::latched_edge, key);
        const double steps = std::round((value + sigma * random.normal()) / step);
        return static_cast<int>(std::clamp(steps, 0.0, static_cast<double>(top)));
    };
    const auto height = [&](std::uint64_t edge, double value_mv) {
        return latched(edge, value_mv, monitor.height_sigma_mv, monitor.height_step_mv,
                       monitor.height_steps_max);
    };
    const auto width = [&](std::uint64_t edge, double value_ui) {
        return latched(edge, value_ui, monitor.width_sigma_ui, monitor.width_step_ui,
                       monitor.width_steps_max);
    };
    edges.up = height(0, truth.up_mv);
    edges.down = height(1, truth.down_mv);
    edges.left = width(2, truth.left_ui);
    edges.right = width(3, truth.right_ui);
    return edges;
}

}  // namespace lanewright::sim
