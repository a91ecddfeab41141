#include "daemon/replay/reading_check.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <set>
#include <utility>
#include <vector>

#include "drivers/board/board_reader.hpp"
#include "drivers/board/sentinel.hpp"

namespace lanewright {

namespace {

// A field of so few bits has all its values tried; of a wider one, each bit turned over.
constexpr unsigned most_bits_tried = 10;

std::string text_of(double value) {
    char text[40];
    std::snprintf(text, sizeof text, "%.17g", value);
    return text;
}

std::string text_of(const Codes& codes) {
    std::string text;
    for (const std::int32_t code : codes.value) {
        text += (text.empty() ? "" : "/") + std::to_string(code);
    }
    return text;
}

std::string hex(std::uint32_t value) {
    char text[16];
    std::snprintf(text, sizeof text, "0x%X", value);
    return text;
}

// Collects the first difference between two readings, value by value.
class Comparison {
  public:
    void number(const std::string& name, double one, double other) {
        const bool same = one == other || (std::isnan(one) && std::isnan(other));
        if (!same) note(name, text_of(one), text_of(other));
    }
    void word(const std::string& name, std::string one, std::string other) {
        if (one != other) note(name, std::move(one), std::move(other));
    }
    void count(const std::string& name, std::uint64_t one, std::uint64_t other) {
        word(name, std::to_string(one), std::to_string(other));
    }
    void measured(const std::string& name, const std::optional<Measured>& one,
                  const std::optional<Measured>& other) {
        if (one.has_value() != other.has_value()) {
            note(name, one ? text_of(one->value) : "none", other ? text_of(other->value) : "none");
        } else if (one) {
            number(name, one->value, other->value);
            number("the standard error of " + name, one->std_error, other->std_error);
            count("the bound of " + name, static_cast<unsigned>(one->bound),
                  static_cast<unsigned>(other->bound));
        }
    }
    const std::optional<ValueDifference>& first() const { return first_; }

  private:
    void note(const std::string& name, std::string one, std::string other) {
        if (!first_) first_ = {name, std::move(one), std::move(other)};
    }

    std::optional<ValueDifference> first_;
};

// Raw counts come first: what is derived from them follows.
void compare_counts(Comparison& all, const Reading& one, const Reading& other) {
    all.count("the number of counts", one.counts.size(), other.counts.size());
    for (std::size_t i = 0; i < std::min(one.counts.size(), other.counts.size()); ++i) {
        const std::string of = " of look " + std::to_string(i);
        const Count& a = one.counts[i];
        const Count& b = other.counts[i];
        all.number("phase_ui" + of, a.look.phase_ui, b.look.phase_ui);
        all.number("offset_mv" + of, a.look.offset_mv, b.look.offset_mv);
        all.count("bits" + of, a.look.bits, b.look.bits);
        all.count("errors" + of, a.errors, b.errors);
        all.count("saturation" + of, a.saturated, b.saturated);
    }
    all.count("the number of telemetry values", one.telemetry.size(), other.telemetry.size());
    for (std::size_t i = 0; i < std::min(one.telemetry.size(), other.telemetry.size()); ++i) {
        all.word("the name of telemetry " + std::to_string(i), one.telemetry[i].name,
                 other.telemetry[i].name);
        all.number(one.telemetry[i].name, one.telemetry[i].value, other.telemetry[i].value);
    }
}

void compare_slopes(Comparison& all, const Reading& one, const Reading& other) {
    if (one.slopes.has_value() != other.slopes.has_value()) {
        all.word("slopes", one.slopes ? "some" : "none", other.slopes ? "some" : "none");
    } else if (one.slopes) {
        all.measured("the slope of up_mv", one.slopes->up_mv, other.slopes->up_mv);
        all.measured("the slope of down_mv", one.slopes->down_mv, other.slopes->down_mv);
        all.measured("the slope of left_ui", one.slopes->left_ui, other.slopes->left_ui);
        all.measured("the slope of right_ui", one.slopes->right_ui, other.slopes->right_ui);
    }
}

// How a result might have been before it was altered.
std::vector<std::uint32_t> candidates(const RegisterDescription* reg, std::uint32_t result,
                                      const Reading& stored) {
    std::set<std::uint32_t> out;
    for (unsigned bit = 0; bit < 32; ++bit) out.insert(result ^ (1u << bit));
    if (reg == nullptr) return {out.begin(), out.end()};
    for (const FieldDescription& field : reg->fields) {
        const std::uint32_t rest = result & ~field.mask();
        if (field.width() <= most_bits_tried) {
            for (std::uint32_t value = 0; value <= field.mask() >> field.low_bit; ++value) {
                out.insert(rest | (value << field.low_bit));
            }
        }
        for (const Count& count : stored.counts) {
            const auto errors = static_cast<std::uint32_t>(count.errors);
            out.insert(rest | ((errors << field.low_bit) & field.mask()));
        }
    }
    out.erase(result);
    return {out.begin(), out.end()};
}

const RegisterDescription* register_at(const BoardFile& board, const RegisterMap& map, Lane lane,
                                       std::uint32_t address) {
    for (const RegisterDescription& reg : board.map.registers) {
        if (reg.fields.empty()) continue;
        const Result<FieldPlace> place = map.place(lane, {reg.name, reg.fields.front().name});
        if (place && place->address == address) return &reg;
    }
    return nullptr;
}

// "MON_UP.steps" where one value differs in one field only, else the register.
std::string field_of(const RegisterDescription& reg, std::uint32_t one, std::uint32_t other) {
    for (const FieldDescription& field : reg.fields) {
        if (((one ^ other) & ~field.mask()) == 0) return reg.name + "." + field.name;
    }
    return reg.name;
}

}  // namespace

std::optional<ValueDifference> first_difference(const Reading& one, const Reading& other) {
    Comparison all;
    all.word("the codes read back", text_of(one.codes), text_of(other.codes));
    all.count("the condition", static_cast<unsigned>(one.condition),
              static_cast<unsigned>(other.condition));
    compare_counts(all, one, other);
    all.measured("up_mv", one.up_mv, other.up_mv);
    all.measured("down_mv", one.down_mv, other.down_mv);
    all.measured("left_ui", one.left_ui, other.left_ui);
    all.measured("right_ui", one.right_ui, other.right_ui);
    all.measured("height_mv", one.height_mv, other.height_mv);
    all.measured("width_ui", one.width_ui, other.width_ui);
    all.word("the status", name_of(one.status), name_of(other.status));
    all.count("centred_assumed", one.centred_assumed, other.centred_assumed);
    all.word("the basis", name_of(one.basis), name_of(other.basis));
    all.word("the error definition", name_of(one.error_definition),
             name_of(other.error_definition));
    all.number("error_ratio", one.error_ratio, other.error_ratio);
    all.number("centre_error_ratio", one.centre_error_ratio.value_or(0),
               other.centre_error_ratio.value_or(0));
    compare_slopes(all, one, other);
    all.count("bit_count", one.bit_count, other.bit_count);
    all.number("cost_s", one.cost_s, other.cost_s);
    return all.first();
}

ReadingCheck::ReadingCheck(BoardFile board, const RegisterMap& map, TimeSource& time,
                           std::size_t resets)
    : board_(std::move(board)), map_(map), time_(time), sentinel_(board_.sentinel) {
    Sentinel sentinel(board_);
    for (std::size_t i = 0; i <= resets; ++i) {
        planted_.insert(sentinel.value());
        sentinel.told_by_dialect(i + 1);
    }
    board_.sentinel.reset();
}

std::optional<SentinelRecord> ReadingCheck::sentinel_of(Lane lane) const {
    if (!sentinel_) return std::nullopt;
    const Result<FieldPlace> place = map_.place(lane, *sentinel_);
    if (!place) return std::nullopt;
    SentinelRecord out{place->address, place->mask, {}};
    for (const std::uint32_t value : planted_) {
        out.values.insert((value << place->shift) & place->mask);
    }
    return out;
}

ReadingCheck::Derived ReadingCheck::derive(const Request& request, const ReadingTaken& taken,
                                           std::vector<WireOperation> record,
                                           const std::optional<Codes>& standing) {
    std::vector<FieldName> dimensions;
    for (const DimensionDescription& each : board_.dimensions) dimensions.push_back(each.field);
    StoredRegisters registers(map_, std::move(record), standing, std::move(dimensions),
                              sentinel_of(taken.lane));
    BoardReader reader(board_, map_, registers, time_);
    Derived out;
    out.reading = run_until_done(time_, reader.read(taken.lane, request, taken.ordinal));
    if (out.reading) registers.end();
    out.difference = registers.difference();
    out.used = registers.used();
    return out;
}

// Whether the stored reading follows from the record with that one result in it.
bool ReadingCheck::explains(const Request& request, const ReadingTaken& taken,
                            const std::optional<Codes>& standing, std::size_t operation,
                            std::uint32_t result) {
    std::vector<WireOperation> record = taken.wire;
    record[operation].result = result;
    const Derived derived = derive(request, taken, std::move(record), standing);
    return derived.reading && !first_difference(derived.reading->reading, taken.reading);
}

// Which single operation of the record would have to be another for the stored reading to follow.
std::optional<ReadingDifference> ReadingCheck::blame(const Request& request,
                                                     const ReadingTaken& taken,
                                                     const Reading& derived,
                                                     const ValueDifference& value,
                                                     const std::optional<Codes>& standing) {
    ReadingDifference out;
    out.what = value.name + " of the stored reading does not follow from its register operations";
    out.expected = value.one;
    out.found = value.other;
    for (std::size_t i = 0; i < taken.wire.size(); ++i) {
        const WireOperation& operation = taken.wire[i];
        if (operation.kind != WireOperation::Kind::read) continue;
        const RegisterDescription* reg = register_at(board_, map_, taken.lane, operation.address);
        for (const std::uint32_t result : candidates(reg, operation.result, taken.reading)) {
            if (!explains(request, taken, standing, i, result)) continue;
            out.operation = i;
            out.reg = reg != nullptr ? field_of(*reg, result, operation.result)
                                     : map_.name_at(operation.address, operation.mask);
            out.what += " (" + value.name + " " + value.other + " stored, " + value.one +
                        " by the record): the result of this operation is not the one that the "
                        "reading was made from";
            out.expected = hex(result);
            out.found = hex(operation.result);
            return out;
        }
    }
    // No one operation explains it: the first that what differs depends on at all.
    for (std::size_t i = 0; i < taken.wire.size() && !out.operation; ++i) {
        std::vector<WireOperation> record = taken.wire;
        if (record[i].kind != WireOperation::Kind::read) continue;
        record[i].result ^= 1;
        const Derived other = derive(request, taken, std::move(record), standing);
        if (!other.reading) continue;
        const auto changed = first_difference(derived, other.reading->reading);
        if (!changed || changed->name != value.name) continue;
        const WireOperation& operation = taken.wire[i];
        const RegisterDescription* reg = register_at(board_, map_, taken.lane, operation.address);
        out.operation = i;
        out.reg = reg != nullptr ? field_of(*reg, operation.result, operation.result ^ 1)
                                 : map_.name_at(operation.address, operation.mask);
    }
    return out;
}

std::optional<ReadingDifference> ReadingCheck::check(const Request& request,
                                                     const ReadingTaken& taken,
                                                     const std::optional<Codes>& standing) {
    Derived derived = derive(request, taken, taken.wire, standing);
    if (derived.difference) {
        const WireDifference& at = *derived.difference;
        return ReadingDifference{at.operation, at.reg,
                                 "a register operation is not the recorded one", at.expected,
                                 at.found};
    }
    if (!derived.reading) {
        const Fault& fault = derived.reading.error();
        ReadingDifference out{
            {}, fault.reg, "the record gives no reading", "a reading", fault.text()};
        if (derived.used > 0) out.operation = derived.used - 1;
        return out;
    }
    if (derived.used < taken.wire.size()) {
        return ReadingDifference{
            derived.used, "", "the record holds more operations than the reading",
            "the end of the record", described(map_, taken.wire[derived.used])};
    }
    const auto value = first_difference(derived.reading->reading, taken.reading);
    if (!value) return std::nullopt;
    return blame(request, taken, derived.reading->reading, *value, standing);
}

}  // namespace lanewright
