#include "drivers/board/counted_look.hpp"

#include <algorithm>
#include <bit>
#include <cmath>
#include <cstdio>
#include <string>

namespace lanewright {

namespace {

Fault fault_of(Cause cause, std::string what, std::string hint) {
    Fault fault;
    fault.cause = cause;
    fault.what = std::move(what);
    fault.hint = std::move(hint);
    return fault;
}

std::string short_text(double value) {
    char text[32];
    std::snprintf(text, sizeof text, "%.4g", value);
    return text;
}

}  // namespace

std::int64_t LookScale::Axis::steps_of(double distance) const {
    const auto steps = static_cast<std::int64_t>(std::llround(distance / step));
    return std::clamp(origin + steps, lowest, highest) - origin;
}

std::int64_t LookScale::Axis::room() const {
    return std::min({origin - lowest, highest - origin, most_steps});
}

LookScale::Axis LookScale::axis_of(const BoardFile& board, const StepSize& size,
                                   Parameter parameter) {
    Axis axis;
    axis.step = size.size;
    axis.centre = axis.origin = size.centre;
    axis.most_steps = size.most_steps;
    axis.lowest = axis.centre - axis.most_steps;
    axis.highest = axis.centre + axis.most_steps;
    for (const Step& step : board.monitor.counted.look) {
        const auto* write = std::get_if<WriteStep>(&step);
        if (write == nullptr || write->value != Operand(parameter)) continue;
        const FieldDescription* field = board.map.find(write->field);
        if (field == nullptr) continue;
        axis.lowest = field->lowest_allowed();
        axis.highest = field->highest_allowed();
    }
    return axis;
}

LookScale::LookScale(const BoardFile& board)
    : board_(&board),
      offset_(axis_of(board, board.monitor.height, Parameter::offset_code)),
      phase_(axis_of(board, board.monitor.width, Parameter::phase_code)) {}

Result<void> LookScale::set_origin(std::uint32_t offset_code, std::uint32_t phase_code) {
    offset_.origin = offset_code;
    phase_.origin = phase_code;
    if (offset_.room() >= 1 && phase_.room() >= 1) return {};
    return fault_of(Cause::refused,
                    "the data sampler's decision point, offset code " +
                        std::to_string(offset_code) + " and phase code " +
                        std::to_string(phase_code) +
                        ", leaves the monitor no room to look to both sides of it",
                    "Check the origin sequence and the monitor's centres in the board file");
}

double LookScale::origin_mv() const {
    return static_cast<double>(offset_.origin - offset_.centre) * offset_.step;
}

double LookScale::origin_ui() const {
    return static_cast<double>(phase_.origin - phase_.centre) * phase_.step;
}

LookGrid LookScale::grid() const {
    const MonitorDescription& monitor = board_->monitor;
    LookGrid grid;
    grid.offset_step_mv = offset_.step;
    grid.phase_step_ui = phase_.step;
    grid.offset_most_steps = static_cast<std::int32_t>(offset_.room());
    grid.phase_most_steps = static_cast<std::int32_t>(phase_.room());
    grid.least_bits = monitor.counted.least_bits;
    grid.most_bits = monitor.counted.most_bits;
    grid.bits_by_powers_of_two = monitor.counted.bits_by_powers_of_two;
    grid.most_errors = monitor.counted.most_errors;
    grid.most_looks = monitor.counted.most_looks;
    grid.error_definition = monitor.error_definition == "decision" ? ErrorDefinition::decision
                                                                   : ErrorDefinition::pattern;
    grid.offset_sigma_mv = monitor.height.sigma;
    grid.phase_sigma_ui = monitor.width.sigma;
    grid.offset_nonlinearity_steps = monitor.height.nonlinearity_steps;
    grid.phase_nonlinearity_steps = monitor.width.nonlinearity_steps;
    return grid;
}

Look LookScale::placed(const Look& wanted) const {
    const CountedDescription& counted = board_->monitor.counted;
    Look out;
    out.offset_mv = static_cast<double>(offset_.steps_of(wanted.offset_mv)) * offset_.step;
    out.phase_ui = static_cast<double>(phase_.steps_of(wanted.phase_ui)) * phase_.step;
    out.bits = std::clamp(wanted.bits, counted.least_bits, counted.most_bits);
    if (counted.bits_by_powers_of_two) out.bits = std::bit_ceil(out.bits);
    return out;
}

void LookScale::tell(const Look& look, SequenceValues& values) const {
    values.offset_code =
        static_cast<std::uint32_t>(offset_.origin + offset_.steps_of(look.offset_mv));
    values.phase_code = static_cast<std::uint32_t>(phase_.origin + phase_.steps_of(look.phase_ui));
    values.dwell_bits = look.bits;
}

Result<void> LookScale::check(const Look& wanted) const {
    // A look is put on the nearest step, so half a step beyond the last is still that one.
    const auto beyond = [](double distance, const Axis& axis) {
        return !(std::abs(distance) <= (static_cast<double>(axis.most_steps) + 0.5) * axis.step);
    };
    const std::string reach =
        short_text(static_cast<double>(offset_.most_steps) * offset_.step) + " mV and " +
        short_text(static_cast<double>(phase_.most_steps) * phase_.step) + " UI";
    if (beyond(wanted.offset_mv, offset_) || beyond(wanted.phase_ui, phase_)) {
        return fault_of(Cause::not_allowed,
                        "a look at " + short_text(wanted.offset_mv) + " mV and " +
                            short_text(wanted.phase_ui) + " UI is beyond the monitor's reach of " +
                            reach,
                        "Ask for looks within it");
    }
    const CountedDescription& counted = board_->monitor.counted;
    if (wanted.bits >= 1 && wanted.bits <= counted.most_bits) return {};
    return fault_of(Cause::not_allowed,
                    "a look of " + std::to_string(wanted.bits) + " bits is outside 1 to " +
                        std::to_string(counted.most_bits),
                    "Ask for a dwell within the monitor's limits");
}

Result<Count> LookScale::count(const Look& placed, const Compiled::Values& values) const {
    const auto value = [&values](const char* name) -> std::optional<std::uint64_t> {
        const auto found = values.find(name);
        if (found == values.end()) return std::nullopt;
        return found->second;
    };
    const std::uint64_t most = board_->monitor.counted.most_errors;
    Count out;
    out.look = placed;
    if (const auto log2 = value("bits_log2")) out.look.bits = *log2 < 64 ? 1ull << *log2 : 0;
    if (const auto bits = value("bits")) {
        out.look.bits = *bits | value("bits_high").value_or(0) << 32;
    }
    const auto errors = value("errors");
    out.errors = errors.value_or(0);
    out.saturated = value("saturated").value_or(0) != 0 || (most > 0 && out.errors >= most);
    if (errors && out.look.bits > 0 && out.errors <= out.look.bits) return out;
    return fault_of(Cause::not_accepted,
                    "the monitor tells " + (errors ? std::to_string(*errors) : std::string("no")) +
                        " errors in " + std::to_string(out.look.bits) + " bits, asked for " +
                        std::to_string(placed.bits),
                    "Check the reads of the look sequence in the board file");
}

}  // namespace lanewright
