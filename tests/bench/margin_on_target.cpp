#include "tests/bench/margin_on_target.hpp"

#include <array>
#include <bit>
#include <cmath>
#include <stdexcept>

#include "adapt/margin/edge_search.hpp"
#include "adapt/stats/random.hpp"
#include "sim_target/monitor/monitored_lane.hpp"

namespace lanewright::bench {
namespace {

constexpr double ratio = 1e-6;
constexpr std::uint64_t tenth_of_a_second = 2'500'000'000;
constexpr double two_sided = 1.959964;  // 95 % of the normal distribution

// What a board file would declare: everything that makes one reading differ from the next.
LookGrid grid_of(const sim::TargetFile& target, const sim::MonitorPoint& origin) {
    const sim::MonitorOptions& monitor = target.monitor;
    const sim::WriteEffects& write = target.chip.write_effects;
    const sim::LockOptions& lock = target.chip.lock;
    LookGrid grid;
    grid.offset_step_mv = monitor.height_step_mv;
    grid.phase_step_ui = monitor.width_step_ui;
    grid.offset_most_steps = sim::MonitoredLane::offset_reach - std::abs(origin.offset);
    grid.phase_most_steps = sim::MonitoredLane::phase_reach - std::abs(origin.phase);
    grid.least_bits = 1024;
    grid.most_bits = std::uint64_t{1} << 40;
    grid.most_errors = (std::uint64_t{1} << 24) - 1;
    grid.offset_nonlinearity_steps = grid.phase_nonlinearity_steps = monitor.nonlinearity_steps;
    // A changed gain moves an edge of some 40 mV.
    grid.offset_sigma_mv = std::hypot(std::hypot(monitor.height_sigma_mv, monitor.height_drift_mv),
                                      std::hypot(write.return_offset_mv, 40 * write.return_gain));
    grid.phase_sigma_ui = std::hypot(std::hypot(monitor.width_sigma_ui, monitor.width_drift_ui),
                                     std::hypot(lock.landing_sigma_ui, lock.wander_sigma_ui));
    return grid;
}

Count count_of(sim::MonitoredLane& lane, const LookGrid& grid, const Look& look) {
    sim::MonitorPoint point = lane.origin();
    point.offset += static_cast<int>(std::lround(look.offset_mv / grid.offset_step_mv));
    point.phase += static_cast<int>(std::lround(look.phase_ui / grid.phase_step_ui));
    const auto log2 = static_cast<unsigned>(std::bit_width(look.bits) - 1);
    const sim::CountedErrors counted = lane.count({}, point, log2);
    Count count{look, counted.errors, false};
    count.look.bits = std::uint64_t{1} << counted.bits_log2;
    if (count.errors >= grid.most_errors) {
        count.errors = grid.most_errors;
        count.saturated = true;
    }
    return count;
}

Reading reading_of(sim::MonitoredLane& lane, const LookGrid& grid) {
    EdgeSearch search({ratio, tenth_of_a_second, {}}, grid);
    for (auto looks = search.next(8); !looks.empty(); looks = search.next(8)) {
        std::vector<Count> counts;
        for (const Look& look : looks) counts.push_back(count_of(lane, grid, look));
        search.told(counts);
    }
    return *search.result();
}

void compare(OnTarget& out, const LookGrid& grid, const Reading& reading,
             const sim::NominalEdges& truth) {
    out.looks.push_back(static_cast<double>(reading.counts.size()));
    if (reading.status == Status::closed) {
        ++out.mistaken;
        return;
    }
    const std::array<std::optional<Measured>, 4> edges{reading.up_mv, reading.down_mv,
                                                       reading.left_ui, reading.right_ui};
    const std::array<double, 4> true_edges{truth.up_mv, truth.down_mv, truth.left_ui,
                                           truth.right_ui};
    for (std::size_t i = 0; i < edges.size(); ++i) {
        if (!edges[i] || edges[i]->bound != Bound::exact) {
            ++out.unbounded;
            continue;
        }
        ++out.edges;
        const double away = std::abs(edges[i]->value - true_edges[i]);
        if (away <= two_sided * edges[i]->std_error) ++out.inside;
        out.error_steps.push_back(edges[i]->std_error /
                                  (i < 2 ? grid.offset_step_mv : grid.phase_step_ui));
    }
}

void read_lane(OnTarget& out, const sim::TargetFile& target, int number, std::uint64_t seed) {
    constexpr std::uint32_t wanted = 4, most_draws = 100;
    sim::MonitoredLane lane(target, number);
    const LookGrid grid = grid_of(target, lane.origin());
    const std::size_t all = lane.oracle().combinations();
    std::uint32_t found = 0;
    for (std::uint32_t draw = 0; found < wanted && draw < most_draws; ++draw) {
        Random random({seed, static_cast<std::uint32_t>(number), 0, draw});
        const auto codes = lane.oracle().codes_at(random.below(all));
        lane.number(draw + 1, false);
        if (!lane.put(codes, true)) continue;
        const sim::NominalEdges truth = lane.nominal_edges(codes, ratio);
        // Hardly open: an edge within a step or two of the centre is another matter.
        if (truth.closed || truth.up_mv < 4 || truth.down_mv < 4) continue;
        ++found;
        compare(out, grid, reading_of(lane, grid), truth);
    }
}

}  // namespace

OnTarget read_on_target(std::uint64_t seed, std::uint32_t chips) {
    Complaints complaints;
    auto target = sim::load_target(LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json", complaints);
    if (!target || complaints.any()) throw std::runtime_error(complaints.text());
    OnTarget out;
    for (std::uint32_t chip = 0; chip < chips; ++chip) {
        target->seed = seed + chip;
        for (std::size_t number = 0; number < target->lanes.size(); ++number) {
            read_lane(out, *target, static_cast<int>(number), seed);
        }
    }
    return out;
}

}  // namespace lanewright::bench
