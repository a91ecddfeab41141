#include "sim_target/board/board_side.hpp"

#include <algorithm>
#include <filesystem>
#include <string_view>

namespace lanewright::sim {

namespace {

struct PartName {
    Part part;
    std::string_view name;
    bool needed = false;
    bool once = false;  // a field of the board, not of a lane
};

constexpr std::array<PartName, part_count> part_names = {{
    {Part::r1, "r1", true},
    {Part::c1, "c1", true},
    {Part::r2, "r2", true},
    {Part::c2, "c2", true},
    {Part::strobe, "strobe", false},
    {Part::trigger, "trigger", true},
    {Part::busy, "busy", true},
    {Part::closed, "closed", false},
    {Part::lock, "lock", false},
    {Part::up, "up", true},
    {Part::down, "down", true},
    {Part::left, "left", true},
    {Part::right, "right", true},
    {Part::dwell_log2, "dwell_log2", false},
    {Part::ratio_exponent, "ratio_exponent", false},
    {Part::ordinal, "ordinal", false},
    {Part::offset, "offset", false},
    {Part::phase, "phase", false},
    {Part::count, "count", false},
    {Part::errors, "errors", false},
    {Part::saturated, "saturated", false},
    {Part::bits, "bits", false},
    {Part::origin_offset, "origin_offset", false},
    {Part::origin_phase, "origin_phase", false},
    {Part::hold_loops, "hold_loops", false},
    {Part::loops, "loops", false},
    {Part::pattern_sync, "pattern_sync", false},
    {Part::inverted, "inverted", false},
    {Part::losses, "losses", false},
    {Part::lane_tag, "lane_tag", false},
    {Part::temperature, "temperature", false, true},
    {Part::supply, "supply", false, true},
    {Part::clock_present, "clock_present", false, true},
    {Part::clock_ok, "clock_ok", false, true},
}};

// An object of "REGISTER.field": value.
std::map<FieldName, std::uint32_t> read_values(const Object& from,
                                               const RegisterMapDescription& map) {
    std::map<FieldName, std::uint32_t> values;
    for (const std::string& key : from.keys()) {
        const Node node = from.need(key);
        const std::size_t dot = key.find('.');
        const FieldName name{key.substr(0, dot),
                             dot == std::string::npos ? "" : key.substr(dot + 1)};
        const FieldDescription* field = map.find(name);
        if (field == nullptr) {
            node.complain("the key \"" + key + "\"", "REGISTER.field of the board file's map");
            continue;
        }
        const std::uint32_t top = field->mask() >> field->low_bit;
        values[name] = static_cast<std::uint32_t>(node.integer({.at_least = 0, .at_most = top}));
    }
    return values;
}

std::optional<FieldName> read_part(const Object& from, const PartName& part,
                                   const RegisterMapDescription& map) {
    const auto node = part.needed ? std::optional(from.need(part.name)) : from.find(part.name);
    if (!node || node->is_null()) return std::nullopt;
    const FieldName name = decode_field_name(*node, map);
    const RegisterDescription* reg = map.find(name.reg);
    if (reg == nullptr || map.find(name) == nullptr) return std::nullopt;
    if (reg->per_lane == part.once) {
        node->complain(name.text() + (part.once ? ", which each lane has"
                                                : ", which the whole board has once"),
                       part.once ? "a field of the whole board" : "a field of each lane");
    }
    return name;
}

void complain_of_doubles(const Object& from, const Binding& binding) {
    for (const PartName& one : part_names) {
        for (const PartName& other : part_names) {
            if (one.part <= other.part || !binding.field(one.part)) continue;
            if (binding.field(one.part) != binding.field(other.part)) continue;
            from.need(one.name).complain("the field of \"" + std::string(other.name) + "\" again",
                                         "a field of its own for each part");
        }
    }
}

// A counted look needs a place, a start and a result.
void complain_of_half_a_counter(const Object& from, const Binding& binding) {
    const std::array<Part, 4> whole = {Part::offset, Part::phase, Part::count, Part::errors};
    const auto bound = [&](Part part) { return binding.field(part).has_value(); };
    if (std::none_of(whole.begin(), whole.end(), bound)) return;
    for (const PartName& part : part_names) {
        if (std::find(whole.begin(), whole.end(), part.part) == whole.end() || bound(part.part)) {
            continue;
        }
        from.node().complain("no key \"" + std::string(part.name) + "\"",
                             "offset, phase, count and errors together");
    }
}

std::vector<std::vector<std::uint16_t>> read_groups(const Object& from, std::uint16_t lanes) {
    std::vector<std::vector<std::uint16_t>> groups;
    std::vector<bool> seen(lanes, false);
    for (const Node group : from.list_or_empty("shared_by")) {
        groups.emplace_back();
        for (const Node node : group.list()) {
            const auto lane = static_cast<std::uint16_t>(
                node.integer({.at_least = 0, .at_most = std::max(0, lanes - 1)}));
            if (lane < lanes && seen[lane]) {
                node.complain("lane " + std::to_string(lane) + " a second time",
                              "each lane in at most one group");
                continue;
            }
            if (lane < lanes) seen[lane] = true;
            groups.back().push_back(lane);
        }
    }
    return groups;
}

Binding read_binding(const Object& from, const RegisterMapDescription& map) {
    Binding binding;
    for (const PartName& part : part_names) {
        binding.fields[static_cast<std::size_t>(part.part)] = read_part(from, part, map);
    }
    complain_of_doubles(from, binding);
    complain_of_half_a_counter(from, binding);
    binding.shared_by = read_groups(from, map.lane_count);
    if (const auto fixed = from.object_if("fixed")) binding.fixed = read_values(*fixed, map);
    from.finish();
    return binding;
}

std::uint32_t read_limit(const Object& from, std::string_view key, std::uint32_t otherwise,
                         std::int64_t least, std::int64_t most) {
    return static_cast<std::uint32_t>(
        from.integer_or(key, otherwise, {.at_least = least, .at_most = most}));
}

WireOptions read_wire(const Object& from) {
    WireOptions wire;
    wire.latency_us =
        from.number_or("latency_us", wire.latency_us, {.at_least = 0, .at_most = 1e7});
    wire.baud = read_limit(from, "baud", wire.baud, 0, 100'000'000);
    wire.lock_us = from.number_or("lock_us", wire.lock_us, {.at_least = 0, .at_most = 1e7});
    wire.default_dwell_s =
        from.number_or("default_dwell_s", wire.default_dwell_s, {.at_least = 0, .at_most = 100});
    BoardLimits& limits = wire.limits;
    limits.largest_payload = read_limit(from, "largest_payload", limits.largest_payload, 64, 65536);
    limits.slots = read_limit(from, "slots", limits.slots, 1, 128);
    limits.most_operations = read_limit(from, "most_operations", limits.most_operations, 16, 65536);
    limits.longest_wait_us =
        read_limit(from, "longest_wait_us", limits.longest_wait_us, 1000, 3'600'000'000);
    limits.sessions = read_limit(from, "sessions", limits.sessions, 1, 64);
    from.finish();
    return wire;
}

RandomFault read_random_fault(const Object& top, std::string_view key, double* late_ms = nullptr) {
    RandomFault fault;
    const auto from = top.object_if(key);
    if (!from) return fault;
    fault.probability = from->number("probability", {.at_least = 0, .at_most = 1});
    fault.direction =
        static_cast<Direction>(from->word_or("direction", 2, {"to_board", "to_host", "both"}));
    if (late_ms != nullptr) {
        *late_ms = from->number_or("by_ms", *late_ms, {.at_least = 0, .at_most = 600'000});
    }
    from->finish();
    return fault;
}

std::uint64_t read_frame_number(const Object& from, std::string_view key) {
    return static_cast<std::uint64_t>(from.integer_or(key, 0, {.at_least = 0}));
}

void read_reset(const Object& from, FaultOptions& faults) {
    for (const Node node : from.list("at_batches")) {
        faults.reset_at_batches.push_back(
            static_cast<std::uint64_t>(node.integer({.at_least = 1})));
    }
    faults.reset_before_batch = from.word_or("when", 0, {"in_batch", "before_batch"}) == 1;
    from.finish();
}

FaultOptions read_faults(const Object& from, const RegisterMapDescription& map) {
    FaultOptions faults;
    faults.seed = static_cast<std::uint64_t>(from.integer_or("seed", 1, {.at_least = 0}));
    faults.flip = read_random_fault(from, "flip");
    faults.cut = read_random_fault(from, "cut");
    faults.twice = read_random_fault(from, "twice");
    faults.late = read_random_fault(from, "late", &faults.late_ms);
    if (const auto reset = from.object_if("reset")) read_reset(*reset, faults);
    faults.silent_from_frame = read_frame_number(from, "silent_from_frame");
    faults.garbage_from_frame = read_frame_number(from, "garbage_from_frame");
    if (const auto drop = from.object_if("drop")) {
        faults.drop_at_frame =
            static_cast<std::uint64_t>(drop->integer("at_frame", {.at_least = 1}));
        faults.back_after_ms = drop->number("back_after_ms", {.at_least = 0, .at_most = 600'000});
        drop->finish();
    }
    if (const auto wrong = from.object_if("wrong_identity")) {
        faults.wrong_identity = read_values(*wrong, map);
    }
    if (const auto console = from.object_if("console")) {
        faults.console_text = console->text("text");
        faults.console_probability = console->number("probability", {.at_least = 0, .at_most = 1});
        console->finish();
    }
    from.finish();
    return faults;
}

RegisterMapDescription load_map(const Node& named, const std::string& path) {
    Complaints complaints;
    RegisterMapDescription map;
    const auto document = Document::load(path, complaints);
    if (document) map = decode_register_map(document->root().object());
    if (complaints.any()) {
        named.complain("a board file that cannot be used:\n" + complaints.text(),
                       "a board file with lanes and registers");
    }
    return map;
}

}  // namespace

Part Binding::part_of(const FieldName& name) const {
    for (std::size_t i = 0; i < part_count; ++i) {
        if (fields[i] == name) return static_cast<Part>(i);
    }
    return fixed.contains(name) ? Part::fixed : Part::none;
}

BoardSide decode_board_side(const Object& top, const std::string& folder) {
    BoardSide side;
    const auto board = top.find("board");
    const auto binding = top.object_if("binding");
    const auto wire = top.object_if("wire");
    const auto faults = top.object_if("faults");
    if (!board) return side;
    side.declared = true;
    side.board_path = (std::filesystem::path(folder) / board->text()).string();
    side.map = load_map(*board, side.board_path);
    if (side.map.registers.empty()) return side;
    side.binding = read_binding(top.object("binding"), side.map);
    if (wire) side.wire = read_wire(*wire);
    if (faults) side.faults = read_faults(*faults, side.map);
    if (const auto lanes = top.find("lanes"); lanes && lanes->is_list()) {
        const std::size_t count = lanes->list().size();
        if (count != side.map.lane_count) {
            lanes->complain(std::to_string(count) + " lanes",
                            std::to_string(side.map.lane_count) + ", as the board file has");
        }
    }
    return side;
}

}  // namespace lanewright::sim
