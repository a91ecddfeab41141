#include "drivers/board/sequences.hpp"

#include <algorithm>
#include <bit>
#include <cmath>
#include <type_traits>

namespace lanewright {

namespace {

std::chrono::microseconds microseconds_of(double ms) {
    // Rounded up: a timeout or pause is never shorter than declared.
    return std::chrono::microseconds(static_cast<std::int64_t>(std::ceil(ms * 1e3)));
}

std::uint32_t value_of(const Operand& operand, const SequenceValues& values) {
    if (const auto* plain = std::get_if<std::uint32_t>(&operand)) return *plain;
    switch (std::get<Parameter>(operand)) {
        case Parameter::ordinal:
            return values.ordinal;
        case Parameter::dwell_log2:
            return dwell_log2_of(values.dwell_bits);
        case Parameter::dwell_bits_low:
            return static_cast<std::uint32_t>(values.dwell_bits & 0xFFFFFFFFu);
        case Parameter::dwell_bits_high:
            return static_cast<std::uint32_t>(values.dwell_bits >> 32);
        case Parameter::ratio_exponent:
            return ratio_exponent_of(values.error_ratio);
        case Parameter::offset_code:
            return values.offset_code;
        case Parameter::phase_code:
            return values.phase_code;
    }
    return 0;
}

}  // namespace

std::uint32_t dwell_log2_of(std::uint64_t dwell_bits) {
    return dwell_bits <= 1 ? 0 : static_cast<std::uint32_t>(std::bit_width(dwell_bits - 1));
}

std::uint32_t ratio_exponent_of(double error_ratio) {
    if (!(error_ratio > 0) || error_ratio >= 1) return 0;
    return static_cast<std::uint32_t>(std::lround(-std::log10(error_ratio)));
}

bool uses(const Sequence& sequence, Parameter parameter) {
    return std::any_of(sequence.begin(), sequence.end(), [parameter](const Step& step) {
        const auto* write = std::get_if<WriteStep>(&step);
        return write != nullptr && write->value == Operand{parameter};
    });
}

Result<void> Compiled::add(const RegisterMap& map,
                           const std::vector<DimensionDescription>& dimensions,
                           const Sequence& sequence, std::size_t first, Lane lane,
                           const SequenceValues& values) {
    for (std::size_t i = first; i < sequence.size(); ++i) {
        const auto* wait = std::get_if<WaitStep>(&sequence[i]);
        if (wait != nullptr && wait->lock) lock_waits_[batch_.size()] = {sequences_added_, i};
        const Result<void> added = add_step(map, dimensions, sequence[i], lane, values);
        if (!added) return added;
    }
    ++sequences_added_;
    return {};
}

Result<void> Compiled::add_step(const RegisterMap& map,
                                const std::vector<DimensionDescription>& dimensions,
                                const Step& step, Lane lane, const SequenceValues& values) {
    return std::visit(
        [&](const auto& each) -> Result<void> {
            using Kind = std::decay_t<decltype(each)>;
            if constexpr (std::is_same_v<Kind, WriteStep>) {
                return add_write(map, each, lane, values);
            } else if constexpr (std::is_same_v<Kind, WriteCodesStep>) {
                return add_codes(map, dimensions, lane, values);
            } else if constexpr (std::is_same_v<Kind, ReadStep>) {
                const Result<FieldRead> added = add_read(map, each.field, lane);
                if (!added) return added.error();
                reads_.push_back({each.as, sequences_added_, *added});
                return {};
            } else if constexpr (std::is_same_v<Kind, WaitStep>) {
                const double dwell_ms =
                    each.plus_dwell && values.bit_rate_gbps > 0
                        ? static_cast<double>(values.dwell_bits) / (values.bit_rate_gbps * 1e6)
                        : 0;
                return map.wait_until(batch_, lane, each.field, each.equals,
                                      microseconds_of(each.timeout_ms + dwell_ms));
            } else if constexpr (std::is_same_v<Kind, PauseStep>) {
                return map.pause(batch_, microseconds_of(each.pause_ms));
            } else {
                combines_.push_back({each, sequences_added_});
                return {};
            }
        },
        step);
}

Result<void> Compiled::add_codes(const RegisterMap& map,
                                 const std::vector<DimensionDescription>& dimensions, Lane lane,
                                 const SequenceValues& values) {
    if (!values.codes)
        return not_allowed("this sequence writes codes and none were given", {}, lane);
    const std::size_t before = batch_.size();
    const Result<void> added = map.write_codes(batch_, lane, *values.codes, values.standing);
    if (!added) return added;
    code_writes_.assign(dimensions.size(), {});
    for (std::size_t i = 0; i < dimensions.size(); ++i) {
        const Result<FieldPlace> place = map.place(lane, dimensions[i].field);
        if (!place) return place.error();
        for (std::size_t k = before; k < batch_.size(); ++k) {
            const auto* write = std::get_if<Write>(&batch_.operations()[k]);
            const FieldPlace& at = place.value();
            if (write != nullptr && write->address == at.address && write->mask == at.mask) {
                code_writes_[i] = {k, at};
            }
        }
    }
    return {};
}

Result<void> Compiled::add_write(const RegisterMap& map, const WriteStep& step, Lane lane,
                                 const SequenceValues& values) {
    const std::uint32_t value = value_of(step.value, values);
    if (step.when_changed) {
        const auto stands = standing_.find(step.field);
        if (stands != standing_.end() && stands->second == value) return {};
    }
    const bool joins = step.when_changed && joinable_ == batch_.size();
    const Result<void> added = joins ? map.write_joined(batch_, lane, step.field, value)
                                     : map.write_declared(batch_, lane, step.field, value);
    if (step.when_changed) joinable_ = batch_.size();
    if (added) standing_[step.field] = value;
    return added;
}

// A register is read once for all its fields that follow each other: they are then of one moment,
// and one that clears on reading gives all of them.
Result<Compiled::FieldRead> Compiled::add_read(const RegisterMap& map, const FieldName& name,
                                               Lane lane) {
    const Result<FieldPlace> place = map.place(lane, name);
    if (!place) return place.error();
    const auto* last = batch_.empty() ? nullptr : std::get_if<Read>(&batch_.operations().back());
    if (last == nullptr || last->address != place->address) {
        const Result<void> added = map.read(batch_, lane, name);
        if (!added) return added.error();
    }
    return FieldRead{batch_.size() - 1, *place};
}

Result<std::size_t> Compiled::add_field(const RegisterMap& map, Lane lane, const FieldName& name) {
    const Result<FieldRead> added = add_read(map, name, lane);
    if (!added) return added.error();
    fields_.push_back(*added);
    return fields_.size() - 1;
}

Result<void> Compiled::add_scratch(const RegisterMap& map, Lane lane, const FieldName& name,
                                   std::uint32_t value) {
    return map.write_declared(batch_, lane, name, value);
}

// In pieces, as a board may limit the length of one pause.
Result<void> Compiled::add_pause(const RegisterMap& map, double seconds) {
    constexpr double piece_s = 10;
    for (double left_s = seconds; left_s > 0; left_s -= piece_s) {
        const Result<void> added =
            map.pause(batch_, microseconds_of(1e3 * std::min(left_s, piece_s)));
        if (!added) return added;
    }
    return {};
}

std::optional<std::uint32_t> Compiled::FieldRead::value(const BatchReply& reply) const {
    if (operation >= reply.results.size() || !reply.results[operation]) return std::nullopt;
    return place.value_in(*reply.results[operation]);
}

std::optional<std::uint32_t> Compiled::field(std::size_t number, const BatchReply& reply) const {
    return number < fields_.size() ? fields_[number].value(reply) : std::nullopt;
}

std::optional<Compiled::LockMissed> Compiled::lock_missed(const BatchReply& reply) const {
    if (reply.outcome != Outcome::wait_expired) return std::nullopt;
    const auto found = lock_waits_.find(reply.failed_at);
    if (found == lock_waits_.end()) return std::nullopt;
    return found->second;
}

Codes Compiled::codes_read_back(const BatchReply& reply) const {
    Codes codes;
    for (const CodeWrite& each : code_writes_) {
        const auto& write = std::get<Write>(batch_.operations()[each.operation]);
        const std::optional<std::uint32_t> seen =
            each.operation < reply.results.size() ? reply.results[each.operation] : std::nullopt;
        codes.value.push_back(
            static_cast<std::int32_t>(each.place.value_in(seen.value_or(write.value))));
    }
    return codes;
}

Compiled::Values Compiled::values(const BatchReply& reply, std::size_t sequence) const {
    Values out;
    for (const NamedRead& each : reads_) {
        if (each.sequence != sequence) continue;
        if (const auto value = each.read.value(reply)) out[each.as] = *value;
    }
    for (const auto& [step, added] : combines_) {
        if (added != sequence) continue;
        const auto high = out.find(step.high), low = out.find(step.low);
        if (high == out.end() || low == out.end() || step.shift >= 32) continue;
        out[step.as] = (high->second << step.shift) | low->second;
    }
    return out;
}

Compiled::Values Compiled::values(const BatchReply& reply) const {
    Values out;
    for (std::size_t i = sequences_added_; i > 0; --i) out.merge(values(reply, i - 1));
    return out;
}

}  // namespace lanewright
