#include "drivers/config/register_description.hpp"

#include <algorithm>
#include <charconv>
#include <cstdint>
#include <map>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

constexpr std::int64_t most_lanes = 1024;
constexpr std::int64_t highest_address = 0xFFFFFFFF;

bool is_name(const std::string& name) {
    const auto letter = [](char c) { return (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z'); };
    const auto other = [](char c) { return (c >= '0' && c <= '9') || c == '_'; };
    return !name.empty() && name.size() <= 64 && letter(name.front()) &&
           std::all_of(name.begin(), name.end(), [&](char c) { return letter(c) || other(c); });
}

// Reads a whole decimal number of at most two digits' worth; empty otherwise.
std::optional<unsigned> bit_number(std::string_view text) {
    unsigned value = 0;
    const char* const end = text.data() + text.size();
    const auto [stopped, error] = std::from_chars(text.data(), end, value);
    if (error != std::errc() || stopped != end || value > 31) return {};
    return value;
}

// "7:4" or "0" into high and low bit; complains of anything else, and of bits beyond the register.
// False then.
bool decode_bits(const Node& node, unsigned register_width, FieldDescription& field) {
    const std::string text = node.text();
    if (!node.is_text()) return false;
    const std::size_t colon = text.find(':');
    const auto high = bit_number(std::string_view(text).substr(0, colon));
    const auto low =
        colon == std::string::npos ? high : bit_number(std::string_view(text).substr(colon + 1));
    if (!high || !low) {
        node.complain(node.described(), "bits such as \"7:4\", highest first, or \"0\"");
        return false;
    }
    if (*high < *low) {
        node.complain(node.described(), "the highest bit first",
                      "write \"" + std::to_string(*low) + ":" + std::to_string(*high) + "\"");
        return false;
    }
    if (*high >= register_width) {
        node.complain(node.described(), "bits below " + std::to_string(register_width) +
                                            ", the width of the register");
        return false;
    }
    field.high_bit = *high;
    field.low_bit = *low;
    return true;
}

void check_role(const Object& object, const FieldDescription& field, bool per_lane) {
    const auto role = object.find("role");
    if (!role) return;
    const bool read_write = field.access == Access::read_write;
    if (field.role == Role::tuned && !read_write)
        role->complain(role->described(), "access read_write for a tuned field",
                       "it is saved and restored");
    if (field.role == Role::tuned && !per_lane)
        role->complain(role->described(), "a tuned field in a per-lane register",
                       "codes belong to one lane");
    if (field.role == Role::scratch && !read_write)
        role->complain(role->described(), "access read_write for a scratch field");
    if (field.role == Role::control && field.access == Access::read_only)
        role->complain(role->described(), "a control field that can be written",
                       "its access is read_only");
}

void check_reset(const Object& object, const FieldDescription& field) {
    if (!field.reset || field.role == Role::none) return;
    if (*field.reset >= field.lowest_allowed() && *field.reset <= field.highest_allowed()) return;
    const Node node = object.need("reset");
    node.complain(node.described(), "a reset value inside the limits on writes, " +
                                        std::to_string(field.lowest_allowed()) + " to " +
                                        std::to_string(field.highest_allowed()));
}

FieldDescription decode_field(const Object& object, unsigned register_width, bool per_lane,
                              bool& bits_known) {
    FieldDescription field;
    field.name = decode_name(object.need("name"));
    bits_known = decode_bits(object.need("bits"), register_width, field);
    field.role =
        static_cast<Role>(object.word_or("role", 0, {"none", "tuned", "control", "scratch"}));
    field.access = static_cast<Access>(
        object.word("access", {"read_only", "read_write", "write_only", "self_clearing"}));
    const auto value_of = [&](std::string_view key) -> std::optional<std::uint32_t> {
        const auto node = object.find(key);
        if (!node) return {};
        return static_cast<std::uint32_t>(node->integer({0, field.mask() >> field.low_bit}));
    };
    field.reset = value_of("reset");
    field.lowest = value_of("lowest");
    field.highest = value_of("highest");
    if (field.lowest_allowed() > field.highest_allowed()) {
        const Node node = object.has("highest") ? object.need("highest") : object.need("lowest");
        node.complain(node.described(),
                      "highest not below lowest, " + std::to_string(field.lowest_allowed()));
    } else {
        check_reset(object, field);
    }
    check_role(object, field, per_lane);
    object.finish();
    return field;
}

void check_against_earlier(const Node& node, const FieldDescription& field, bool bits_known,
                           const std::vector<FieldDescription>& earlier) {
    for (const FieldDescription& other : earlier) {
        if (!field.name.empty() && other.name == field.name)
            node.complain("a second field " + field.name, "each name once in a register");
        if (bits_known && (other.mask() & field.mask()) != 0)
            node.complain("field " + field.name + " on bits of field " + other.name,
                          "fields that do not overlap");
    }
}

RegisterDescription decode_register(const Object& object, const RegisterMapDescription& map) {
    RegisterDescription reg;
    reg.name = decode_name(object.need("name"));
    reg.per_lane = object.boolean_or("per_lane", false);
    const Node address = object.need("address");
    reg.address = static_cast<std::uint32_t>(address.integer({0, highest_address}));
    if (reg.per_lane && map.lane_stride > 0 && reg.address >= map.lane_stride)
        address.complain(address.described(), "an offset inside a lane's block, below " +
                                                  std::to_string(map.lane_stride));
    const Node width = object.need("width");
    reg.width_bits = static_cast<unsigned>(width.integer({8, 32}));
    if (reg.width_bits != 8 && reg.width_bits != 16 && reg.width_bits != 32) {
        if (width.is_number()) width.complain(width.described(), "8, 16 or 32");
        reg.width_bits = 32;
    }
    const List fields = object.list("fields");
    if (fields.node().is_list() && fields.size() == 0)
        fields.node().complain("an empty list", "at least one field");
    for (const Node node : fields) {
        const Object field_object = node.object();
        bool bits_known = false;
        FieldDescription field =
            decode_field(field_object, reg.width_bits, reg.per_lane, bits_known);
        check_against_earlier(node, field, bits_known, reg.fields);
        reg.fields.push_back(std::move(field));
    }
    object.finish();
    return reg;
}

void decode_lanes(const Object& top, RegisterMapDescription& map) {
    const Object lanes = top.object("lanes");
    map.lane_count = static_cast<std::uint16_t>(lanes.integer("count", {1, most_lanes}));
    map.lane_base = static_cast<std::uint32_t>(lanes.integer("base", {0, highest_address}));
    const Node stride = lanes.need("stride");
    map.lane_stride = static_cast<std::uint32_t>(stride.integer({1, highest_address}));
    if (stride.is_null()) map.lane_stride = 0;  // not known: nothing can be checked against it
    const std::uint64_t end = std::uint64_t{map.lane_base} +
                              std::uint64_t{map.lane_count} * std::uint64_t{map.lane_stride};
    if (end > std::uint64_t{highest_address} + 1)
        stride.complain(stride.described(), "lane blocks that end below address 0x100000000");
    lanes.finish();
}

// Every address of the map with the register that owns it; complains of a second owner.
class AddressBook {
  public:
    explicit AddressBook(const RegisterMapDescription& map) : map_(map) {}

    void add(const Node& node, const RegisterDescription& reg) {
        if (reg.per_lane && map_.lane_stride == 0) return;
        const std::uint16_t copies = reg.per_lane ? map_.lane_count : 1;
        for (std::uint16_t lane = 0; lane < copies; ++lane) {
            const std::uint64_t address =
                reg.per_lane ? std::uint64_t{map_.lane_base} +
                                   std::uint64_t{lane} * map_.lane_stride + reg.address
                             : reg.address;
            const auto [owner, is_new] = owners_.emplace(address, reg.name);
            if (is_new) continue;
            std::string found = "the address of " + owner->second;
            if (reg.per_lane) found += " (in lane " + std::to_string(lane) + ")";
            node.complain(std::move(found), "an address of its own");
            return;
        }
    }

  private:
    const RegisterMapDescription& map_;
    std::map<std::uint64_t, std::string> owners_;
};

}  // namespace

std::string decode_name(const Node& node) {
    const std::string name = node.text();
    if (node.is_text() && !is_name(name))
        node.complain(node.described(), "a name of letters, digits and _, a letter first");
    return name;
}

const RegisterDescription* RegisterMapDescription::find(const std::string& reg) const {
    for (const RegisterDescription& candidate : registers) {
        if (candidate.name == reg) return &candidate;
    }
    return nullptr;
}

const FieldDescription* RegisterMapDescription::find(const FieldName& name) const {
    const RegisterDescription* reg = find(name.reg);
    if (reg == nullptr) return nullptr;
    for (const FieldDescription& candidate : reg->fields) {
        if (candidate.name == name.field) return &candidate;
    }
    return nullptr;
}

RegisterMapDescription decode_register_map(const Object& top) {
    RegisterMapDescription map;
    decode_lanes(top, map);
    const List registers = top.list("registers");
    if (registers.node().is_list() && registers.size() == 0)
        registers.node().complain("an empty list", "at least one register");
    AddressBook addresses(map);
    for (const Node node : registers) {
        const Object object = node.object();
        RegisterDescription reg = decode_register(object, map);
        if (!reg.name.empty() && map.find(reg.name) != nullptr)
            node.complain("a second register " + reg.name, "each name once");
        if (object.has("address")) addresses.add(object.need("address"), reg);
        map.registers.push_back(std::move(reg));
    }
    return map;
}

FieldName decode_field_name(const Node& node, const RegisterMapDescription& map) {
    const std::string text = node.text();
    if (!node.is_text()) return {};
    const std::size_t dot = text.find('.');
    if (dot == std::string::npos) {
        node.complain(node.described(), "a field as \"REGISTER.field\"");
        return {};
    }
    FieldName name{text.substr(0, dot), text.substr(dot + 1)};
    if (map.find(name) != nullptr) return name;

    const RegisterDescription* reg = map.find(name.reg);
    std::vector<std::string_view> candidates;
    if (reg != nullptr) {
        for (const FieldDescription& field : reg->fields) candidates.push_back(field.name);
    } else {
        for (const RegisterDescription& other : map.registers) candidates.push_back(other.name);
    }
    const std::string near = nearest_word(reg != nullptr ? name.field : name.reg, candidates);
    std::string hint;
    if (!near.empty())
        hint = "did you mean \"" +
               (reg != nullptr ? name.reg + "." + near : near + "." + name.field) + "\"?";
    node.complain(node.described(),
                  reg != nullptr ? "a field of " + name.reg : "a register of this file",
                  std::move(hint));
    return {};
}

}  // namespace lanewright
