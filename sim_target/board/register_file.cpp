#include "sim_target/board/register_file.hpp"

#include <algorithm>

namespace lanewright::sim {

namespace {

bool is_status(Part part) {
    switch (part) {
        case Part::busy:
        case Part::closed:
        case Part::lock:
        case Part::up:
        case Part::down:
        case Part::left:
        case Part::right:
        case Part::errors:
        case Part::saturated:
        case Part::bits:
        case Part::origin_offset:
        case Part::origin_phase:
        case Part::loops:
        case Part::pattern_sync:
        case Part::inverted:
        case Part::losses:
        case Part::lane_tag:
        case Part::temperature:
        case Part::supply:
        case Part::clock_present:
        case Part::clock_ok:
            return true;
        default:
            return false;
    }
}

bool is_code(Part part) {
    return part <= Part::c2;
}

bool starts_something(Part part) {
    return part == Part::strobe || part == Part::trigger || part == Part::count;
}

}  // namespace

RegisterFile::RegisterFile(const RegisterMapDescription& map, const Binding& binding,
                           const std::map<FieldName, std::uint32_t>& overrides,
                           const std::vector<int>& reset_codes, Hardware& hardware)
    : hardware_(hardware) {
    for (const RegisterDescription& reg : map.registers) {
        const std::uint16_t copies = reg.per_lane ? map.lane_count : std::uint16_t{1};
        for (std::uint16_t lane = 0; lane < copies; ++lane) {
            const std::uint32_t address =
                reg.per_lane ? map.lane_base + lane * map.lane_stride + reg.address : reg.address;
            Register made = make_register(reg, lane, binding, overrides, reset_codes);
            for (const Field& field : made.fields) {
                if (field.part < Part::fixed) address_of_part_[{lane, field.part}] = address;
            }
            registers_.emplace(address, std::move(made));
        }
    }
    reset();
}

RegisterFile::Register RegisterFile::make_register(
    const RegisterDescription& from, std::uint16_t lane, const Binding& binding,
    const std::map<FieldName, std::uint32_t>& overrides,
    const std::vector<int>& reset_codes) const {
    Register reg;
    reg.lane = lane;
    reg.per_lane = from.per_lane;
    reg.all = from.width_bits >= 32 ? 0xFFFFFFFFu : (1u << from.width_bits) - 1u;
    for (const FieldDescription& description : from.fields) {
        const FieldName name{from.name, description.name};
        Field field;
        field.low_bit = description.low_bit;
        field.mask = description.mask();
        field.access = description.access;
        field.part = binding.part_of(name);
        field.reset = description.reset.value_or(0);
        if (const auto fixed = binding.fixed.find(name); fixed != binding.fixed.end()) {
            field.reset = fixed->second;
        }
        if (is_code(field.part)) {
            field.reset =
                static_cast<std::uint32_t>(reset_codes.at(static_cast<std::size_t>(field.part)));
        }
        if (const auto wrong = overrides.find(name); wrong != overrides.end()) {
            field.reset = wrong->second;
        }
        reg.readable = reg.readable || field.access != Access::write_only;
        reg.writable = reg.writable || field.access != Access::read_only;
        reg.fields.push_back(field);
    }
    return reg;
}

void RegisterFile::reset() {
    for (auto& [address, reg] : registers_) {
        reg.value = 0;
        for (const Field& field : reg.fields) {
            if (field.access == Access::self_clearing) continue;
            reg.value |= (field.reset << field.low_bit) & field.mask;
        }
    }
}

// A status that does not fit its field shows the most that the field can hold, as a counter that
// stopped at its top does.
std::uint32_t RegisterFile::present_value(const Register& reg, const Field& field) {
    if (field.access == Access::write_only || field.access == Access::self_clearing) return 0;
    if (!is_status(field.part)) return reg.value & field.mask;
    const std::uint32_t top = field.mask >> field.low_bit;
    return std::min(hardware_.status(reg.lane, field.part), top) << field.low_bit;
}

Outcome RegisterFile::read(std::uint32_t address, std::uint32_t& value) {
    const auto found = registers_.find(address);
    if (found == registers_.end()) return Outcome::no_register;
    const Register& reg = found->second;
    if (!reg.readable) return Outcome::no_access;
    value = 0;
    for (const Field& field : reg.fields) value |= present_value(reg, field);
    return Outcome::done;
}

Outcome RegisterFile::write(std::uint32_t address, std::optional<std::uint32_t> mask,
                            std::uint32_t value) {
    const auto found = registers_.find(address);
    if (found == registers_.end()) return Outcome::no_register;
    Register& reg = found->second;
    if (!reg.writable) return Outcome::no_access;
    if ((value & ~reg.all) != 0 || (mask.value_or(0) & ~reg.all) != 0) return Outcome::beyond_width;
    const std::uint32_t written = mask.value_or(reg.all);
    std::optional<Part> told;
    for (const Field& field : reg.fields) {
        const std::uint32_t bits = field.mask & written;
        const bool keeps = field.access == Access::read_write || field.access == Access::write_only;
        if (bits == 0 || !keeps) continue;
        reg.value = (reg.value & ~bits) | (value & bits);
        if (is_code(field.part)) told = field.part;
        if (field.part == Part::ordinal) hardware_.written(reg.lane, field.part);
    }
    if (told) hardware_.written(reg.lane, *told);
    for (const Field& field : reg.fields) {
        if (starts_something(field.part) && (field.mask & written & value) != 0) {
            hardware_.started(reg.lane, field.part);
        }
    }
    return Outcome::done;
}

std::uint32_t RegisterFile::all_bits(std::uint32_t address) const {
    const auto found = registers_.find(address);
    return found == registers_.end() ? 0 : found->second.all;
}

const RegisterFile::Field* RegisterFile::find(std::uint16_t lane, Part part,
                                              const Register** reg) const {
    const auto address = address_of_part_.find({lane, part});
    if (address == address_of_part_.end()) return nullptr;
    *reg = &registers_.at(address->second);
    for (const Field& field : (*reg)->fields) {
        if (field.part == part) return &field;
    }
    return nullptr;
}

std::optional<std::uint32_t> RegisterFile::stored(std::uint16_t lane, Part part) const {
    const Register* reg = nullptr;
    const Field* field = find(lane, part, &reg);
    if (field == nullptr) return std::nullopt;
    return (reg->value & field->mask) >> field->low_bit;
}

std::uint32_t RegisterFile::top(std::uint16_t lane, Part part) const {
    const Register* reg = nullptr;
    const Field* field = find(lane, part, &reg);
    return field == nullptr ? 0 : field->mask >> field->low_bit;
}

void RegisterFile::overwrite(std::uint16_t lane, Part part, std::uint32_t value) {
    const Register* found = nullptr;
    const Field* field = find(lane, part, &found);
    if (field == nullptr) return;
    Register& reg = registers_.at(address_of_part_.at({lane, part}));
    reg.value = (reg.value & ~field->mask) | ((value << field->low_bit) & field->mask);
}

std::optional<std::uint16_t> RegisterFile::lane_of(std::uint32_t address) const {
    const auto found = registers_.find(address);
    if (found == registers_.end() || !found->second.per_lane) return std::nullopt;
    return found->second.lane;
}

}  // namespace lanewright::sim
