// What counted readings are worth: how often 95 % intervals hold the true edge, how wide they are
// against the least that any estimate from the same looks could be, how many looks and how much
// dwell they take, and what the searching itself costs. On a plain monitor of its own: edges of
// published form (Gaussian, two Diracs, mixtures), positions off by a fifth of a step, a burst or
// slip in 1 % of readings, keyed draws. Truth is the noise-free edge through the same monitor.
// usage: bench_margin [--lanes N]

#include <algorithm>
#include <charconv>
#include <cmath>
#include <cstring>
#include <iostream>
#include <string>
#include <vector>

#include "adapt/stats/q_scale.hpp"
#include "tests/adapt/counting_lane.hpp"
#include "tests/bench/margin_on_target.hpp"
#include "tests/bench/rows.hpp"

using namespace lanewright;
using namespace lanewright::bench;
using namespace lanewright::tests;

namespace {

constexpr int exit_usage = 64;  // sysexits.h
constexpr std::uint64_t seed = 101;
constexpr double bits_a_second = 25e9;
constexpr auto tenth_of_a_second = static_cast<std::uint64_t>(0.1 * bits_a_second);
constexpr double two_sided = 1.959964;  // 95 % of the normal distribution

struct Case {
    std::string name;
    double asked = 1e-6, stated = 1e-6;
    bool expected = true;
    double nonlinearity_steps = 0.2;
};

struct Tally {
    std::size_t edges = 0, inside = 0, unbounded = 0;
    double error_steps = 0, least_steps = 0;
    std::size_t compared = 0;
    std::vector<double> looks, dwell_s, own_us;
};

LookGrid grid_of(const Case& what) {
    LookGrid grid = demo_grid();
    grid.offset_nonlinearity_steps = grid.phase_nonlinearity_steps = what.nonlinearity_steps;
    grid.offset_sigma_mv = 0.1;
    grid.phase_sigma_ui = 0.001;
    return grid;
}

double step_of(const LookGrid& grid, std::size_t direction) {
    return direction < 2 ? grid.offset_step_mv : grid.phase_step_ui;
}

// A last reading at a neighbouring code: wrong by up to a fifth.
Expected roughly(const CountingLane& lane, const LookGrid& grid, double ratio) {
    const auto guess = [&](std::size_t direction) {
        const double wrong = 0.1 * (static_cast<double>((lane.lane * 7 + direction * 3) % 5) - 2);
        return lane.true_edge_steps(grid, direction, ratio) * step_of(grid, direction) *
               (1 + wrong);
    };
    return {guess(0), guess(1), guess(2), guess(3)};
}

// The same counts given again, so that only the search is timed.
double own_time_us(const Reading& reading, const MarginWanted& wanted, const LookGrid& grid) {
    const double start = cpu_seconds();
    constexpr int times = 5;
    for (int i = 0; i < times; ++i) {
        EdgeSearch search(wanted, grid);
        std::size_t told = 0;
        for (auto looks = search.next(8); !looks.empty() && told < reading.counts.size();
             looks = search.next(8)) {
            search.told(std::span(reading.counts).subspan(told, looks.size()));
            told += looks.size();
        }
        if (!search.result()) return std::nan("");
    }
    return (cpu_seconds() - start) / times * 1e6;
}

void add_edges(Tally& tally, const CountingLane& lane, const LookGrid& grid, const Reading& reading,
               double ratio) {
    const std::array<std::optional<Measured>, 4> edges{reading.up_mv, reading.down_mv,
                                                       reading.left_ui, reading.right_ui};
    const EdgeSlopes& all = *reading.slopes;
    const std::array<Measured, 4> slopes{all.up_mv, all.down_mv, all.left_ui, all.right_ui};
    for (std::size_t direction = 0; direction < 4; ++direction) {
        const double step = step_of(grid, direction);
        const double truth = lane.true_edge_steps(grid, direction, ratio) * step;
        if (!edges[direction] || truth == 0) continue;
        const Measured there =
            carried_edge(*edges[direction], slopes[direction], reading.error_ratio, ratio);
        if (there.bound != Bound::exact || !std::isfinite(there.std_error)) {
            ++tally.unbounded;
            continue;
        }
        ++tally.edges;
        if (std::abs(there.value - truth) <= two_sided * there.std_error) ++tally.inside;
        // Half a step: beyond, hardly anything was counted that tells a line.
        const auto least = least_error_steps(lane, grid, reading.counts, direction, ratio);
        if (least && *least < 0.5) {
            ++tally.compared;
            tally.error_steps += there.std_error / step;
            tally.least_steps += *least;
        }
    }
}

Tally measure(const Case& what, std::uint32_t lanes) {
    Tally tally;
    const LookGrid grid = grid_of(what);
    for (std::uint32_t i = 0; i < lanes; ++i) {
        CountingLane lane = drawn_lane(static_cast<EdgeShape>(i % 3), seed, i, 1e-6);
        lane.nonlinearity_steps = what.nonlinearity_steps;
        lane.spoilt_readings = 0.01;
        MarginWanted wanted{what.asked, tenth_of_a_second, {}};
        if (what.expected) wanted.expected = roughly(lane, grid, counted_ratio(wanted, grid));
        const auto counted = read(lane, grid, wanted, 0);
        if (!counted || counted->reading.status == Status::closed) {
            tally.unbounded += 4;
            continue;
        }
        const Reading& reading = counted->reading;
        tally.looks.push_back(static_cast<double>(counted->looks));
        tally.dwell_s.push_back(static_cast<double>(reading.bit_count) / bits_a_second);
        if (i % 5 == 0) tally.own_us.push_back(own_time_us(reading, wanted, grid));
        add_edges(tally, lane, grid, reading, what.stated);
    }
    return tally;
}

double median(std::vector<double> values) {
    if (values.empty()) return std::nan("");
    const auto middle = values.begin() + static_cast<std::ptrdiff_t>(values.size() / 2);
    std::nth_element(values.begin(), middle, values.end());
    return *middle;
}

void write(Rows& rows, const Case& what, const Tally& tally) {
    const auto row = [&](const char* name, double value, const char* unit, Better better,
                         std::optional<double> must, std::size_t n) {
        rows.row({.name = what.name + "." + name,
                  .value = value,
                  .unit = unit,
                  .better = better,
                  .must = must,
                  .n = n,
                  .seed = seed});
    };
    const double coverage = double(tally.inside) / double(std::max<std::size_t>(tally.edges, 1));
    row("coverage", coverage, "", Better::more, 0.94, tally.edges);
    if (what.asked == what.stated) {
        // Held only where the coverage is more than it need be.
        const auto must = coverage > 0.98 ? std::optional(1.5) : std::nullopt;
        row("width_of_least", tally.error_steps / tally.least_steps, "", Better::less, must,
            tally.compared);
        row("error", tally.error_steps / double(std::max<std::size_t>(tally.compared, 1)), "step",
            Better::less, std::nullopt, tally.compared);
    }
    const double all = double(tally.edges + tally.unbounded);
    row("without_limit", double(tally.unbounded) / all, "", Better::less, std::nullopt,
        tally.edges + tally.unbounded);
    row("looks_p50", median(tally.looks), "", Better::less, 16, tally.looks.size());
    row("dwell_p50", median(tally.dwell_s), "s", Better::less, 0.1, tally.dwell_s.size());
    row("own_cpu_p50", median(tally.own_us), "us", Better::less, 200, tally.own_us.size());
}

struct Closed {
    std::size_t lanes = 0, signed_scores = 0;
    std::vector<double> looks, dwell_s;
};

// Lanes shut down to centres between 1e-5 and 0.2.
Closed measure_closed(std::uint32_t lanes) {
    Closed closed;
    const LookGrid grid = demo_grid();
    for (std::uint32_t i = 0; i < lanes; ++i) {
        CountingLane lane = drawn_lane(static_cast<EdgeShape>(i % 3), seed, i, 1e-6);
        const double centre = std::pow(10.0, -5 + 4.3 * i / lanes);
        double low = -200, high = 400;
        for (int k = 0; k < 60; ++k) {
            lane.level_mv = 0.5 * (low + high);
            (lane.centre_ratio() > centre ? low : high) = lane.level_mv;
        }
        const auto counted = read(lane, grid, {1e-6, tenth_of_a_second, {}}, 0);
        ++closed.lanes;
        if (!counted) continue;
        const Reading& reading = counted->reading;
        closed.looks.push_back(static_cast<double>(counted->looks));
        closed.dwell_s.push_back(static_cast<double>(reading.bit_count) / bits_a_second);
        const bool told = reading.status == Status::closed && reading.centre_error_ratio &&
                          reading.up_mv->bound == Bound::exact && reading.left_ui->value < 0;
        closed.signed_scores += told ? 1 : 0;
    }
    return closed;
}

// The simulated board's own monitor: drift, bursts, jitter and all.
void write_on_target(Rows& rows, std::uint32_t chips) {
    const OnTarget found = read_on_target(seed, chips);
    const auto row = [&](const char* name, double value, const char* unit, Better better,
                         std::optional<double> must, std::size_t n) {
        rows.row({.name = std::string("on_target.") + name,
                  .value = value,
                  .unit = unit,
                  .better = better,
                  .must = must,
                  .n = n,
                  .seed = seed});
    };
    const double edges = double(std::max<std::size_t>(found.edges, 1));
    row("coverage", double(found.inside) / edges, "", Better::more, 0.94, found.edges);
    row("error_p50", median(found.error_steps), "step", Better::less, std::nullopt, found.edges);
    row("without_limit", double(found.unbounded) / (edges + double(found.unbounded)), "",
        Better::less, std::nullopt, found.edges + found.unbounded);
    row("open_taken_for_closed", double(found.mistaken), "", Better::less, std::nullopt,
        found.looks.size());
    row("looks_p50", median(found.looks), "", Better::less, 16, found.looks.size());
}

std::uint32_t lanes_from(int count, char** words) {
    if (count == 1) return 1000;
    std::uint32_t lanes = 0;
    if (count != 3 || std::strcmp(words[1], "--lanes") != 0) return 0;
    const char* end = words[2] + std::strlen(words[2]);
    const auto read = std::from_chars(words[2], end, lanes);
    return read.ec == std::errc{} && read.ptr == end && lanes <= 100'000 ? lanes : 0;
}

}  // namespace

int main(int count, char** words) {
    const std::uint32_t lanes = lanes_from(count, words);
    if (lanes == 0) {
        std::cerr << "usage: bench_margin [--lanes N], 1 to 100000\n";
        return exit_usage;
    }
    Rows rows(std::cout);
    const std::vector<Case> cases{
        {"first_reading", 1e-6, 1e-6, false, 0.2}, {"at_1e-6", 1e-6, 1e-6, true, 0.2},
        {"even_positions", 1e-6, 1e-6, true, 0},   {"at_1e-4", 1e-4, 1e-4, true, 0.2},
        {"at_1e-7", 1e-7, 1e-7, true, 0.2},        {"extrapolated_1e-12", 1e-12, 1e-12, true, 0.2}};
    for (const Case& each : cases) write(rows, each, measure(each, lanes));
    const Closed closed = measure_closed(lanes);
    rows.row({.name = "closed.signed_score",
              .value = double(closed.signed_scores) / double(closed.lanes),
              .unit = "",
              .better = Better::more,
              .n = closed.lanes,
              .seed = seed});
    rows.row({.name = "closed.looks_p50",
              .value = median(closed.looks),
              .unit = "",
              .better = Better::less,
              .must = 16,
              .n = closed.lanes,
              .seed = seed});
    rows.row({.name = "closed.dwell_p50",
              .value = median(closed.dwell_s),
              .unit = "s",
              .better = Better::less,
              .n = closed.lanes,
              .seed = seed});
    write_on_target(rows, std::max(lanes / 50, 1U));
    return rows.finish();
}
