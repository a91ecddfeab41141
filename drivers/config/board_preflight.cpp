// What is read beside the margins: telemetry, the sentinel of a reset, and the status that a lane
// must have before anything is measured.

#include <array>
#include <cstdint>
#include <set>
#include <string>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

// The order in which they are told: what is further down makes no sense where one fails.
constexpr std::array<std::string_view, 6> item_names = {
    "reference_clock", "lock", "pattern_sync", "polarity", "lane_order", "loops"};

std::optional<double> limit(const Object& object, std::string_view key, double most) {
    if (!object.has(key)) return {};
    return object.number(key, {.at_most = most, .above = 0});
}

PreflightLimits decode_limits(const Object& preflight) {
    PreflightLimits limits;
    const auto object = preflight.object_if("limits");
    if (!object) return limits;
    constexpr double most_mv = 1e6, most_ui = 10, most_s = 3600;
    limits.repeatability_mv = limit(*object, "repeatability_mv", most_mv);
    limits.repeatability_ui = limit(*object, "repeatability_ui", most_ui);
    limits.return_mv = limit(*object, "return_mv", most_mv);
    limits.return_ui = limit(*object, "return_ui", most_ui);
    limits.settle_s = limit(*object, "settle_s", most_s);
    object->finish();
    return limits;
}

// A number, or the word "lane".
void decode_equals(const Node& node, const RegisterMapDescription& map, StatusExpectation& item) {
    const std::uint32_t largest = largest_value(map, item.field);
    const std::string text = node.is_text() ? node.text() : "";
    item.equals_lane = node.is_text() && !text.starts_with("0x") && !text.starts_with("0X");
    if (!item.equals_lane) {
        item.equals = static_cast<std::uint32_t>(node.integer({0, largest}));
        return;
    }
    node.word({"lane"});
    const RegisterDescription* reg = map.find(item.field.reg);
    if (reg != nullptr && !reg->per_lane)
        node.complain("\"lane\" for a field of the whole board", "it for a per-lane register");
    else if (map.lane_count > 0 && map.lane_count - 1u > largest)
        node.complain("\"lane\" for " + item.field.text(),
                      "a field that can hold " + std::to_string(map.lane_count - 1));
}

}  // namespace

void decode_telemetry(const Object& top, BoardFile& board) {
    std::set<std::string> names = {"origin_mv", "origin_ui"};  // those that every reading may have
    for (const Node node : top.list_or_empty("telemetry")) {
        const Object entry = node.object();
        TelemetryField one;
        const Node name = entry.need("name");
        one.name = decode_name(name);
        if (!one.name.empty() && !names.insert(one.name).second)
            name.complain("a second " + one.name, "each name once");
        one.field = decode_readable_field(entry.need("field"), board.map);
        constexpr NumberRange range{.at_least = -1e12, .at_most = 1e12};
        one.scale = entry.number_or("scale", one.scale, range);
        one.offset = entry.number_or("offset", one.offset, range);
        entry.finish();
        board.telemetry.push_back(std::move(one));
    }
}

void decode_sentinel(const Object& top, BoardFile& board) {
    const auto node = top.find("sentinel");
    if (!node) return;
    board.sentinel = decode_scratch(*node, board.map);
    const FieldDescription* field = board.map.find(*board.sentinel);
    if (field == nullptr) return;
    if (*board.sentinel == board.scratch || board.sentinel == board.ordinal)
        node->complain(node->described(), "a field of its own",
                       "scratch and ordinal write other values to it");
    constexpr unsigned least_width = 4;  // room for some values that a reset does not leave
    if (field->width() < least_width)
        node->complain(node->described() + ", " + std::to_string(field->width()) + " bits wide",
                       "a field of 4 bits or more");
    else if (field->lowest || field->highest)
        node->complain(node->described() + ", a field with limits", "a field without limits");
}

void decode_preflight(const Object& top, BoardFile& board) {
    const auto object = top.object_if("preflight");
    if (!object) return;
    for (const std::string_view name : item_names) {
        const auto entry = object->object_if(name);
        if (!entry) continue;
        StatusExpectation item;
        item.name = name;
        item.field = decode_readable_field(entry->need("field"), board.map);
        decode_equals(entry->need("equals"), board.map, item);
        entry->finish();
        board.preflight.items.push_back(std::move(item));
    }
    board.preflight.limits = decode_limits(*object);
    object->finish();
}

}  // namespace lanewright
