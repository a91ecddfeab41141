#include "sim_target/monitor_options.hpp"

#include <algorithm>

namespace lanewright::sim {

namespace {

double share(const Object& from, std::string_view key, double most) {
    return from.number_or(key, 0, {.at_least = 0, .at_most = most});
}

LockOptions read_lock(const Object& from) {
    LockOptions to;
    to.lost_above_ui = from.number_or("lost_above_ui", 0.7, {.at_most = 2, .above = 0});
    to.regained_below_ui =
        from.number_or("regained_below_ui", to.lost_above_ui, {.at_most = 2, .above = 0});
    if (to.regained_below_ui > to.lost_above_ui) {
        from.need("regained_below_ui")
            .complain("more than lost_above_ui", "a spread that is not above lost_above_ui");
    }
    to.landing_sigma_ui = share(from, "landing_sigma_ui", 0.2);
    to.wander_sigma_ui = share(from, "wander_sigma_ui", 0.2);
    to.wander_time_s = from.number_or("wander_time_s", 120, {.at_least = 1e-3, .at_most = 1e7});
    from.finish();
    return to;
}

WriteEffects read_write_effects(const Object& from) {
    WriteEffects to;
    to.settle_time_s = share(from, "settle_time_us", 1e7) * 1e-6;
    to.settle_mv = from.number_or("settle_mv", 0, {.at_least = -1000, .at_most = 1000});
    to.return_offset_mv = share(from, "return_offset_mv", 100);
    to.return_gain = share(from, "return_gain", 0.2);
    to.unheld_landing_ui = share(from, "unheld_landing_ui", 0.2);
    from.finish();
    return to;
}

Telemetry read_telemetry(const Object& from) {
    Telemetry to;
    to.temperature_error_c =
        from.number_or("temperature_error_c", 0, {.at_least = -50, .at_most = 50});
    to.supply_mv = from.number_or("supply_mv", 900, {.at_least = 0, .at_most = 4000});
    from.finish();
    return to;
}

std::uint16_t read_lane(const Node& node, std::size_t lanes) {
    const auto most = static_cast<std::int64_t>(std::max<std::size_t>(lanes, 1)) - 1;
    return static_cast<std::uint16_t>(node.integer({.at_least = 0, .at_most = most}));
}

FailureSwitches::Lanes read_lanes(const Object& from, std::string_view key, std::size_t lanes) {
    FailureSwitches::Lanes to;
    for (const Node node : from.list_or_empty(key)) to.push_back(read_lane(node, lanes));
    return to;
}

void read_swaps(const Object& from, std::size_t lanes, FailureSwitches& to) {
    std::vector<bool> seen(std::max<std::size_t>(lanes, 1), false);
    for (const Node node : from.list_or_empty("swapped")) {
        const List pair = node.list();
        if (pair.size() != 2) {
            node.complain("a list of " + std::to_string(pair.size()), "two lanes");
            continue;
        }
        const std::uint16_t one = read_lane(pair.at(0), lanes),
                            other = read_lane(pair.at(1), lanes);
        if (one == other || seen[one] || seen[other]) {
            node.complain("a lane a second time", "each lane in at most one pair");
            continue;
        }
        seen[one] = seen[other] = true;
        to.swapped.emplace_back(one, other);
    }
}

ForeignWrite read_foreign_write(const Object& from, std::size_t lanes,
                                const std::array<int, 4>& codes) {
    ForeignWrite to;
    to.lane = read_lane(from.need("lane"), lanes);
    to.dimension = static_cast<int>(from.word("dimension", {"r1", "c1", "r2", "c2"}));
    const std::int64_t top = codes[static_cast<std::size_t>(to.dimension)] - 1;
    to.code = static_cast<std::uint32_t>(from.integer("code", {.at_least = 0, .at_most = top}));
    for (const Node node : from.list("at_batches")) {
        to.at_batches.push_back(static_cast<std::uint64_t>(node.integer({.at_least = 1})));
    }
    from.finish();
    return to;
}

FailureSwitches read_failures(const Object& from, std::size_t lanes,
                              const std::array<int, 4>& codes) {
    FailureSwitches to;
    to.clock =
        static_cast<ReferenceClock>(from.word_or("reference_clock", 0, {"good", "off", "absent"}));
    to.no_lock = read_lanes(from, "no_lock", lanes);
    to.out_of_sync = read_lanes(from, "pattern_out_of_sync", lanes);
    to.inverted = read_lanes(from, "inverted", lanes);
    to.loops_off = read_lanes(from, "loops_off", lanes);
    to.too_few_errors = read_lanes(from, "too_few_errors", lanes);
    to.not_monotone = read_lanes(from, "not_monotone", lanes);
    to.wrong_bits = read_lanes(from, "wrong_bits", lanes);
    read_swaps(from, lanes, to);
    const NumberRange times{.at_least = 1, .at_most = 1e6};
    to.repeatability_times = from.number_or("repeatability_times", 1, times);
    to.return_error_times = from.number_or("return_error_times", 1, times);
    to.settle_times = from.number_or("settle_times", 1, times);
    to.parallel_offset_mv =
        from.number_or("parallel_offset_mv", 0, {.at_least = -1000, .at_most = 1000});
    for (const Node node : from.list_or_empty("foreign_writes")) {
        to.foreign_writes.push_back(read_foreign_write(node.object(), lanes, codes));
    }
    from.finish();
    return to;
}

}  // namespace

bool FailureSwitches::holds(const Lanes& lanes, int lane) {
    return std::find(lanes.begin(), lanes.end(), lane) != lanes.end();
}

MonitorOptions read_monitor_options(const Object& from) {
    MonitorOptions to;
    to.height_step_mv = from.number_or("height_step_mv", 2, {.at_most = 1000, .above = 0});
    to.width_step_ui = from.number_or("width_step_ui", 1.0 / 64, {.at_most = 0.5, .above = 0});
    const IntegerRange steps{.at_least = 1, .at_most = 65535};
    to.height_steps_max = static_cast<int>(from.integer_or("height_steps_max", 255, steps));
    to.width_steps_max = static_cast<int>(from.integer_or("width_steps_max", 31, steps));
    to.error_ratio = from.number_or("error_ratio", 1e-6, {.at_least = 1e-18, .at_most = 0.1});
    to.against =
        static_cast<ErrorsAgainst>(from.word_or("errors_against", 0, {"pattern", "decision"}));
    to.offset_sigma_mv = share(from, "offset_sigma_mv", 100);
    to.phase_sigma_ui = share(from, "phase_sigma_ui", 0.2);
    to.gain_tolerance = share(from, "gain_tolerance", 0.5);
    to.nonlinearity_steps = share(from, "nonlinearity_steps", 0.5);
    to.height_sigma_mv = share(from, "height_sigma_mv", 1000);
    to.width_sigma_ui = share(from, "width_sigma_ui", 1);
    to.height_drift_mv = share(from, "height_drift_mv", 1000);
    to.width_drift_ui = share(from, "width_drift_ui", 1);
    to.drift_time_s = from.number_or("drift_time_s", 400, {.at_least = 1e-3, .at_most = 1e7});
    to.deterministic_jitter_ui = share(from, "deterministic_jitter_ui", 0.5);
    to.event_share = share(from, "event_share", 1);
    to.settle_s = from.number_or("settle_s", to.settle_s, {.at_least = 0, .at_most = 1000});
    to.per_look_s = from.number_or("per_look_s", to.per_look_s, {.at_least = 0, .at_most = 1000});
    from.finish();
    return to;
}

ChipOfTarget read_chip_options(const Object& top, std::size_t lanes,
                               const std::array<int, 4>& codes) {
    ChipOfTarget to;
    if (const auto from = top.object_if("lock")) to.lock = read_lock(*from);
    if (const auto from = top.object_if("write_effects")) {
        to.write_effects = read_write_effects(*from);
    }
    if (const auto from = top.object_if("telemetry")) to.telemetry = read_telemetry(*from);
    if (const auto from = top.object_if("failures")) {
        to.failures = read_failures(*from, lanes, codes);
    }
    return to;
}

}  // namespace lanewright::sim
