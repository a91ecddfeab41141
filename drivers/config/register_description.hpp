#pragma once
// Purpose:   the plain description of a register map: data shared by the drivers, which turn it
//            into checked write requests, and by the simulated board, which packs its own fields.
// Ownership: values only.
// Threads:   no shared state.

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "drivers/config/json_reader.hpp"

namespace lanewright {

enum class Access : std::uint8_t {
    read_only,
    read_write,
    write_only,    // reads back as nothing in particular
    self_clearing  // a written one starts something and reads back as zero
};

// Who may write the field. `none` is never written.
enum class Role : std::uint8_t { none, tuned, control, scratch };

struct FieldDescription {
    std::string name;
    unsigned low_bit = 0, high_bit = 0;
    Role role = Role::none;
    Access access = Access::read_only;
    std::optional<std::uint32_t> reset;  // value after a reset, where the file states it
    std::optional<std::uint32_t> lowest,
        highest;  // limits on writes; absent: all the bits can hold

    unsigned width() const { return high_bit - low_bit + 1; }
    std::uint32_t mask() const {  // in place
        const std::uint32_t ones = width() >= 32 ? 0xFFFFFFFFu : (1u << width()) - 1u;
        return ones << low_bit;
    }
    std::uint32_t lowest_allowed() const { return lowest.value_or(0); }
    std::uint32_t highest_allowed() const { return highest.value_or(mask() >> low_bit); }
};

struct RegisterDescription {
    std::string name;
    std::uint32_t address = 0;  // absolute, or the offset in a lane's block where per_lane
    unsigned width_bits = 32;   // 8, 16 or 32
    bool per_lane = false;
    std::vector<FieldDescription> fields;
};

// "REGISTER.field"
struct FieldName {
    std::string reg, field;
    auto operator<=>(const FieldName&) const = default;
    std::string text() const { return reg + "." + field; }
};

struct RegisterMapDescription {
    std::uint16_t lane_count = 0;
    std::uint32_t lane_base = 0, lane_stride = 0;  // a lane's block starts at base + lane * stride
    std::vector<RegisterDescription> registers;

    const RegisterDescription* find(const std::string& reg) const;
    const FieldDescription* find(const FieldName& name) const;
};

// Decodes "lanes" and "registers" of a board file; complaints for overlapping fields, fields
// outside the register, equal names, overlapping addresses, roles that access forbids.
RegisterMapDescription decode_register_map(const Object& top);

// Decodes a "REGISTER.field" string and complains unless the map has it.
FieldName decode_field_name(const Node& node, const RegisterMapDescription& map);

}  // namespace lanewright
