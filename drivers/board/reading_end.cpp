#include "drivers/board/reading_end.hpp"

#include <string>

namespace lanewright {

Result<void> ReadingEnd::add(Compiled& compiled) {
    codes_.clear();
    telemetry_.clear();
    for (const DimensionDescription& dimension : board_->dimensions) {
        const FieldDescription* field = map_->find(dimension.field);
        codes_.emplace_back();
        if (field == nullptr || field->access != Access::read_write) continue;
        const Result<std::size_t> added = compiled.add_field(*map_, lane_, dimension.field);
        if (!added) return added.error();
        codes_.back() = *added;
    }
    for (const TelemetryField& each : board_->telemetry) {
        const Result<std::size_t> added = compiled.add_field(*map_, lane_, each.field);
        if (!added) return added.error();
        telemetry_.push_back(*added);
    }
    if (board_->sentinel) {
        const Result<std::size_t> added = compiled.add_field(*map_, lane_, *board_->sentinel);
        if (!added) return added.error();
        sentinel_ = *added;
    }
    return {};
}

Result<void> ReadingEnd::check_codes(const Compiled& compiled, const BatchReply& reply,
                                     const Codes& written) const {
    for (std::size_t i = 0; i < codes_.size() && i < written.value.size(); ++i) {
        if (!codes_[i]) continue;
        const std::optional<std::uint32_t> found = compiled.field(*codes_[i], reply);
        if (!found || static_cast<std::int32_t>(*found) == written.value[i]) continue;
        Fault fault;
        fault.cause = Cause::codes_changed;
        fault.reg = board_->dimensions[i].field.text();
        fault.lane = lane_;
        fault.what = fault.reg + " was set to " + std::to_string(written.value[i]) +
                     " and read back so, but at the end of the reading it was " +
                     std::to_string(*found) + ": something else writes " + fault.reg;
        fault.hint =
            "Stop whatever else writes to this board: firmware, another program, adaptation on the "
            "chip";
        return fault;
    }
    return {};
}

Result<void> ReadingEnd::check_sentinel(const Compiled& compiled, const BatchReply& reply) const {
    if (!sentinel_) return {};
    const std::optional<std::uint32_t> found = compiled.field(*sentinel_, reply);
    if (!found || *found == sentinel_value_) return {};
    Fault fault;
    fault.cause = Cause::board_reset;
    fault.reg = board_->sentinel->text();
    fault.lane = lane_;
    fault.what = "the board was reset during this reading: its sentinel " + fault.reg +
                 " should hold " + std::to_string(sentinel_value_) + " and holds " +
                 std::to_string(*found);
    return fault;
}

std::vector<Telemetry> ReadingEnd::telemetry(const Compiled& compiled,
                                             const BatchReply& reply) const {
    std::vector<Telemetry> out;
    for (std::size_t i = 0; i < telemetry_.size(); ++i) {
        const TelemetryField& each = board_->telemetry[i];
        const std::optional<std::uint32_t> raw = compiled.field(telemetry_[i], reply);
        if (raw) out.push_back({each.name, *raw * each.scale + each.offset});
    }
    return out;
}

}  // namespace lanewright
