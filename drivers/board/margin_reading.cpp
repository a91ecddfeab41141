// One margin reading of a latched monitor.

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <utility>

#include "adapt/margin/latched.hpp"
#include "drivers/board/board_reader.hpp"

namespace lanewright {

namespace {

MonitorGrid grid_of(const MonitorDescription& monitor) {
    MonitorGrid grid;
    grid.height_step_mv = monitor.height.size;
    grid.width_step_ui = monitor.width.size;
    grid.height_max_steps = monitor.height.most_steps;
    grid.width_max_steps = monitor.width.most_steps;
    grid.height_sigma_mv = monitor.height.sigma;
    grid.width_sigma_ui = monitor.width.sigma;
    return grid;
}

Fault cannot_measure(std::string what, std::string hint) {
    Fault fault;
    fault.cause = Cause::bad_config;
    fault.what = std::move(what);
    fault.hint = std::move(hint);
    return fault;
}

std::string text_of(double ratio) {
    char text[32];
    std::snprintf(text, sizeof text, "%.3g", ratio);
    return text;
}

// The margin that the monitor can be told to measure, nearest to the one asked for.
Result<MarginWanted> told_to_monitor(const BoardFile& board, const Request& request) {
    const auto* wanted = std::get_if<MarginWanted>(&request.what);
    if (wanted == nullptr) {
        return cannot_measure("a latching monitor takes margins, not single looks",
                              "Use a procedure that asks for margins");
    }
    MarginWanted told = *wanted;
    told.dwell_bits = dwelt_bits(board, wanted->dwell_bits);
    if (uses(board.monitor.sequence, Parameter::ratio_exponent)) {
        told.error_ratio =
            std::pow(10.0, -static_cast<double>(ratio_exponent_of(told.error_ratio)));
    }
    // A relative 1e-9 forgives the rounding of powers of ten.
    const double lowest = board.monitor.lowest_error_ratio * (1 - 1e-9);
    if (!(told.error_ratio > 0) || told.error_ratio < lowest) {
        return cannot_measure("the monitor latches margins down to an error ratio of " +
                                  text_of(board.monitor.lowest_error_ratio) + ", not at " +
                                  text_of(wanted->error_ratio),
                              "Ask for a higher error ratio in the recipe");
    }
    return told;
}

std::int32_t steps(const std::map<std::string, std::uint32_t>& values, const char* name) {
    const auto found = values.find(name);
    constexpr std::uint32_t most = 0x7FFFFFFF;
    return found == values.end() ? 0 : static_cast<std::int32_t>(std::min(found->second, most));
}

Reading edges_of(const BoardFile& board, const std::map<std::string, std::uint32_t>& values,
                 bool locked, const MarginWanted& told) {
    const auto closed_flag = values.find("closed");
    const bool closed = closed_flag != values.end() && closed_flag->second != 0;
    if (board.monitor.four_edges) {
        LatchedEdges edges;
        edges.locked = locked;
        if (!closed) {
            edges.up = steps(values, "up");
            edges.down = steps(values, "down");
            edges.left = steps(values, "left");
            edges.right = steps(values, "right");
        }
        return latched_reading(grid_of(board.monitor), edges, told);
    }
    LatchedOpening opening;
    opening.locked = locked;
    if (!closed) {
        opening.height = steps(values, "height");
        opening.width = steps(values, "width");
    }
    return latched_reading(grid_of(board.monitor), opening, told);
}

}  // namespace

std::uint64_t dwelt_bits(const BoardFile& board, std::uint64_t wanted_bits) {
    if (!uses(board.monitor.sequence, Parameter::dwell_log2)) return wanted_bits;
    return std::uint64_t{1} << std::min<std::uint32_t>(dwell_log2_of(wanted_bits), 63);
}

// Lanes with one monitor between them measure one after another.
Task<Turnstile::Pass> BoardReader::take_monitor(Lane lane, Batch batch) {
    const std::size_t group =
        number(lane) < monitor_of_lane_.size() ? monitor_of_lane_[number(lane)] : monitors_.size();
    if (group >= monitors_.size()) co_return Turnstile::Pass{};
    const auto lanes = static_cast<std::int64_t>(board_.monitor.shared_by[group].size());
    const TimePoint deadline = time_.now() + (lanes + 1) * registers_.longest(batch);
    Result<Turnstile::Pass> pass = co_await monitors_[group]->enter(time_, deadline, never_);
    if (!pass) co_return at(lane, pass.error());
    co_return std::move(*pass);
}

Task<LaneReading> BoardReader::read(Lane lane, Request request, std::uint32_t ordinal) {
    Result<MarginWanted> told = told_to_monitor(board_, request);
    if (!told) co_return at(lane, told.error());
    Result<SequenceValues> values = co_await values_for(lane, request.codes);
    if (!values) co_return values.error();
    values->ordinal = ordinal;
    values->dwell_bits = told->dwell_bits;
    values->error_ratio = told->error_ratio;
    Compiled compiled;
    Result<void> added = compiled.add(map_, board_.dimensions, board_.apply, 0, lane, *values);
    if (added) {
        added = compiled.add(map_, board_.dimensions, board_.monitor.sequence, 0, lane, *values);
    }
    if (!added) co_return at(lane, added.error());
    Result<Turnstile::Pass> pass = co_await take_monitor(lane, compiled.batch());
    if (!pass) co_return pass.error();
    Result<Carried> carried = co_await carry_out(lane, compiled, *values);
    pass->leave();
    if (!carried) co_return carried.error();
    co_return reading_of(compiled, *carried, request, *values);
}

Result<LaneReading> BoardReader::reading_of(const Compiled& compiled, const Carried& carried,
                                            const Request& request,
                                            const SequenceValues& values) const {
    MarginWanted told;
    told.error_ratio = values.error_ratio;
    told.dwell_bits = values.dwell_bits;
    LaneReading out;
    out.reading = edges_of(board_, compiled.values(carried.reply), carried.locked, told);
    out.reading.codes = compiled.codes_read_back(carried.reply);
    out.reading.condition = request.condition;
    out.reading.error_definition = board_.monitor.error_definition == "decision"
                                       ? ErrorDefinition::decision
                                       : ErrorDefinition::pattern;
    const double looks = board_.cost.looks_per_margin;
    const double dwell_s = static_cast<double>(told.dwell_bits) / (board_.bit_rate_gbps * 1e9);
    // Without lock the sequence ended before the monitor was started.
    out.reading.bit_count = carried.locked ? told.dwell_bits * board_.cost.looks_per_margin : 0;
    out.reading.cost_s = board_.cost.settle_s;
    if (carried.locked) out.reading.cost_s += looks * (board_.cost.per_look_s + dwell_s);
    out.wire = carried.wire;
    return out;
}

}  // namespace lanewright
