// One reading: what is common to all monitors, and the margin of a latched one.

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <utility>

#include "adapt/margin/latched.hpp"
#include "drivers/board/board_reader.hpp"
#include "drivers/board/wire_record.hpp"

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
Task<Turnstile::Pass> BoardReader::take_monitor(Lane lane, std::chrono::nanoseconds longest) {
    const std::size_t group =
        number(lane) < monitor_of_lane_.size() ? monitor_of_lane_[number(lane)] : monitors_.size();
    if (group >= monitors_.size()) co_return Turnstile::Pass{};
    const auto lanes = static_cast<std::int64_t>(board_.monitor.shared_by[group].size());
    const TimePoint deadline = time_.now() + (lanes + 1) * longest;
    Result<Turnstile::Pass> pass = co_await monitors_[group]->enter(time_, deadline, never_);
    if (!pass) co_return at(lane, pass.error());
    co_return std::move(*pass);
}

Task<LaneReading> BoardReader::read(Lane lane, Request request, std::uint32_t ordinal) {
    constexpr double longest_wait_s = 3600;
    if (!(request.wait_s >= 0) || request.wait_s > longest_wait_s) {
        co_return at(lane, cannot_measure("a wait of " + text_of(request.wait_s) +
                                              " s before the measurement is outside 0 to " +
                                              text_of(longest_wait_s) + " s",
                                          "Ask for a shorter one"));
    }
    const Result<void> standing = not_reset(lane);
    if (!standing) co_return standing.error();
    if (board_.monitor.procedure == MonitorProcedure::counted) {
        co_return co_await read_counted(lane, std::move(request), ordinal);
    }
    co_return co_await read_latched(lane, std::move(request), ordinal);
}

// The codes, and what has to stand before and pass behind them.
Result<Compiled> BoardReader::begin_reading(Lane lane, const Request& request,
                                            const SequenceValues& values) {
    Compiled compiled;
    Result<void> added = plant_sentinel(lane, compiled);
    if (added) added = compiled.add(map_, board_.dimensions, board_.apply, 0, lane, values);
    if (added) added = compiled.add_pause(map_, request.wait_s);
    if (!added) return at(lane, added.error());
    return compiled;
}

Result<void> BoardReader::finish(Lane lane, const ReadingEnd& end, const Compiled& compiled,
                                 const BatchReply& reply, LaneReading& out) {
    if (const Result<void> stood = end.check_sentinel(compiled, reply); !stood) {
        sentinel_.found_fallen(end.generation());
        sentinel_.must_be_told(lane);  // this is it
        return at(lane, stood.error());
    }
    sentinel_.written(lane, end.generation());
    const Result<void> codes = end.check_codes(compiled, reply, out.reading.codes);
    if (!codes) return at(lane, codes.error());
    out.reading.telemetry = end.telemetry(compiled, reply);
    return {};
}

// In a batch of its own: the one before ended at the wait for lock, or was not known to be the
// last.
Task<LaneReading> BoardReader::end_alone(Lane lane, ReadingEnd end, LaneReading out) {
    Compiled compiled;
    const Result<void> added = end.add(compiled);
    if (!added) co_return at(lane, added.error());
    if (compiled.batch().empty()) co_return out;
    Result<BatchReply> reply = co_await run(lane, compiled.batch());
    if (!reply) co_return reply.error();
    const Result<void> whole = map_.check_reply(compiled.batch(), *reply);
    if (!whole) co_return at(lane, whole.error());
    const std::vector<WireOperation> wire = wire_record(compiled.batch(), *reply);
    out.wire.insert(out.wire.end(), wire.begin(), wire.end());
    const Result<void> finished = finish(lane, end, compiled, *reply, out);
    if (!finished) co_return finished.error();
    co_return out;
}

Task<LaneReading> BoardReader::read_latched(Lane lane, Request request, std::uint32_t ordinal) {
    Result<MarginWanted> told = told_to_monitor(board_, request);
    if (!told) co_return at(lane, told.error());
    Result<SequenceValues> values = co_await values_for(lane, request.codes);
    if (!values) co_return values.error();
    values->ordinal = ordinal;
    values->dwell_bits = told->dwell_bits;
    values->error_ratio = told->error_ratio;
    Result<Compiled> compiled = begin_reading(lane, request, *values);
    if (!compiled) co_return compiled.error();
    Result<void> added =
        compiled->add(map_, board_.dimensions, board_.monitor.sequence, 0, lane, *values);
    ReadingEnd end(board_, map_, sentinel_, lane);
    if (added) added = end.add(*compiled);
    if (!added) co_return at(lane, added.error());
    Result<Turnstile::Pass> pass =
        co_await take_monitor(lane, registers_.longest(compiled->batch()));
    if (!pass) co_return pass.error();
    Result<Carried> carried = co_await carry_out(lane, *compiled, *values);
    pass->leave();
    if (!carried) co_return carried.error();
    LaneReading out = latched_reading_of(*compiled, *carried, request, *values);
    if (!carried->locked()) co_return co_await end_alone(lane, end, out);
    const Result<void> finished = finish(lane, end, *compiled, carried->reply, out);
    if (!finished) co_return finished.error();
    co_return out;
}

LaneReading BoardReader::latched_reading_of(const Compiled& compiled, const Carried& carried,
                                            const Request& request,
                                            const SequenceValues& values) const {
    MarginWanted told;
    told.error_ratio = values.error_ratio;
    told.dwell_bits = values.dwell_bits;
    LaneReading out;
    out.reading = edges_of(board_, compiled.values(carried.reply), carried.locked(), told);
    out.reading.codes = compiled.codes_read_back(carried.reply);
    out.reading.condition = request.condition;
    out.reading.error_definition = board_.monitor.error_definition == "decision"
                                       ? ErrorDefinition::decision
                                       : ErrorDefinition::pattern;
    const double looks = board_.cost.looks_per_margin;
    const double dwell_s = static_cast<double>(told.dwell_bits) / (board_.bit_rate_gbps * 1e9);
    // Without lock the sequence ended before the monitor was started.
    out.reading.bit_count = carried.locked() ? told.dwell_bits * board_.cost.looks_per_margin : 0;
    out.reading.cost_s = board_.cost.settle_s + request.wait_s;
    if (carried.locked()) out.reading.cost_s += looks * (board_.cost.per_look_s + dwell_s);
    out.wire = carried.wire;
    return out;
}

}  // namespace lanewright
