#include "daemon/replay/columns_board.hpp"

#include <bit>
#include <limits>
#include <utility>

namespace lanewright {

namespace {

constexpr std::int64_t highest_code = 65535;
constexpr std::uint16_t lane_count = 1024;  // any lane that a file may name

void decode_table(const Object& object, const FieldDescription& field,
                  DimensionDescription& dimension) {
    if (dimension.part == PartName::other) return;  // a table would then be an unknown key
    const bool resistor =
        dimension.part == PartName::series_resistor || dimension.part == PartName::shunt_resistor;
    const auto node = object.find(resistor ? "nominal_ohm" : "nominal_farad");
    if (!node) return;
    dimension.nominal = node->list().numbers({.above = 0});
    const std::size_t codes = std::size_t{*field.highest} - *field.lowest + 1;
    if (!dimension.nominal.empty() && dimension.nominal.size() != codes)
        node->complain(node->described(), std::to_string(codes) + " values, one for every code");
}

void decode_dimension(const Object& object, BoardFile& board) {
    DimensionDescription dimension;
    const Node name = object.need("name");
    dimension.name = name.text();
    if (name.is_text() && dimension.name.empty()) name.complain("an empty name", "a name");
    if (board.map.find(dimension.name) != nullptr)
        name.complain("a second dimension " + dimension.name, "each name once");
    FieldDescription field;
    field.name = "code";
    field.role = Role::tuned;
    field.access = Access::read_write;
    field.lowest = static_cast<std::uint32_t>(object.integer("lowest", {0, highest_code}));
    const Node highest = object.need("highest");
    field.highest = static_cast<std::uint32_t>(highest.integer({0, highest_code}));
    if (*field.highest < *field.lowest) {
        highest.complain(highest.described(),
                         "highest not below lowest, " + std::to_string(*field.lowest));
        field.highest = field.lowest;
    }
    field.high_bit = static_cast<unsigned>(std::bit_width(*field.highest | 1u)) - 1;
    const std::vector<std::string_view> parts = {"series_resistor", "series_capacitor",
                                                 "shunt_resistor", "shunt_capacitor", "other"};
    const auto part = object.find("part");
    dimension.part = part ? static_cast<PartName>(part->word(parts)) : PartName::other;
    decode_table(object, field, dimension);
    for (const DimensionDescription& other : board.dimensions) {
        if (part && dimension.part != PartName::other && other.part == dimension.part)
            part->complain("the part of dimension " + other.name, "each part once, or other");
    }
    object.finish();

    RegisterDescription reg;
    reg.name = dimension.name;
    reg.address = static_cast<std::uint32_t>(board.map.registers.size());
    reg.per_lane = true;
    reg.fields.push_back(std::move(field));
    board.map.registers.push_back(std::move(reg));
    dimension.field = {dimension.name, "code"};
    board.dimensions.push_back(std::move(dimension));
}

void decode_noise(const Object& object, MonitorDescription& monitor) {
    constexpr NumberRange not_negative{.at_least = 0};
    monitor.height.size = object.number("height_step_mv", not_negative);
    monitor.height.sigma = object.number("height_sigma_mv", not_negative);
    monitor.width.size = object.number("width_step_ui", not_negative);
    monitor.width.sigma = object.number("width_sigma_ui", not_negative);
    // Where the monitor's range ends is not known.
    monitor.height.most_steps = monitor.width.most_steps = std::numeric_limits<std::int32_t>::max();
    object.finish();
}

void decode_cost(const Object& object, CostDescription& cost) {
    cost.settle_s = object.number("settle_s", {.at_least = 0});
    cost.per_look_s = object.number("per_look_s", {.at_least = 0});
    cost.looks_per_margin =
        static_cast<std::uint32_t>(object.integer_or("looks_per_margin", 1, {1, 1000000}));
    object.finish();
}

}  // namespace

BoardFile decode_columns_board(const Object& object, const ColumnMap& columns) {
    BoardFile board;
    board.path = columns.path;
    board.name = columns.name;
    board.description = columns.description;
    board.map.lane_count = lane_count;
    const List dimensions = object.list("dimensions");
    if (dimensions.node().is_list() && dimensions.size() == 0)
        dimensions.node().complain("an empty list", "at least one dimension");
    for (const Node node : dimensions) decode_dimension(node.object(), board);
    board.map.lane_stride = static_cast<std::uint32_t>(board.map.registers.size());
    board.bit_rate_gbps = object.number("bit_rate_gbps", {.at_most = 10000, .above = 0});
    decode_noise(object.object("noise"), board.monitor);
    if (const auto cost = object.object_if("cost")) decode_cost(*cost, board.cost);
    board.monitor.pattern = columns.pattern;
    board.monitor.error_definition = columns.error_definition.kind == Stated::Kind::value
                                         ? columns.error_definition.text
                                         : "unknown";
    object.finish();
    return board;
}

}  // namespace lanewright
