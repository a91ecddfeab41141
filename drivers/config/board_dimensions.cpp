#include <algorithm>
#include <cstdint>
#include <optional>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

// Codes travel as 32-bit signed numbers, and a table or a scan over more codes than these is a
// mistake in the file.
constexpr std::uint32_t highest_code = 65535;

bool is_resistor(PartName part) {
    return part == PartName::series_resistor || part == PartName::shunt_resistor;
}

void decode_nominal(const Object& object, const FieldDescription* field,
                    DimensionDescription& dimension) {
    if (dimension.part == PartName::other) return;  // a table would then be an unknown key
    const auto node = object.find(is_resistor(dimension.part) ? "nominal_ohm" : "nominal_farad");
    if (!node) return;
    const List list = node->list();
    dimension.nominal = list.numbers({.above = 0});
    if (dimension.nominal.empty() || field == nullptr) return;
    const std::size_t codes = std::size_t{field->highest_allowed()} - field->lowest_allowed() + 1;
    if (dimension.nominal.size() != codes)
        node->complain(node->described(), std::to_string(codes) + " values, one for every code");
}

DimensionDescription decode_dimension(const Object& object, const BoardFile& board) {
    DimensionDescription dimension;
    const Node name = object.need("name");
    dimension.name = decode_name(name);
    const Node field_node = object.need("field");
    dimension.field = decode_field_name(field_node, board.map);
    const FieldDescription* field = board.map.find(dimension.field);
    if (field != nullptr && field->role != Role::tuned) {
        field_node.complain(field_node.described(), "a field of role tuned");
        field = nullptr;
    }
    if (field != nullptr && field->highest_allowed() > highest_code)
        field_node.complain(field_node.described(), "a field whose highest code is at most " +
                                                        std::to_string(highest_code));
    const std::vector<std::string_view> parts = {"series_resistor", "series_capacitor",
                                                 "shunt_resistor", "shunt_capacitor", "other"};
    const auto part = object.find("part");
    dimension.part = part ? static_cast<PartName>(part->word(parts)) : PartName::other;
    decode_nominal(object, field, dimension);
    for (const DimensionDescription& other : board.dimensions) {
        if (!dimension.name.empty() && other.name == dimension.name)
            name.complain("a second dimension " + dimension.name, "each name once");
        if (field != nullptr && other.field == dimension.field)
            field_node.complain("the field of dimension " + other.name, "each field once");
        if (part && dimension.part != PartName::other && other.part == dimension.part)
            part->complain("the part of dimension " + other.name, "each part once, or other");
    }
    object.finish();
    return dimension;
}

const FieldDescription* field_of(const BoardFile& board, const std::string& dimension) {
    for (const DimensionDescription& candidate : board.dimensions) {
        if (candidate.name == dimension) return board.map.find(candidate.field);
    }
    return nullptr;
}

ForbiddenRange decode_range(const Object& object, const BoardFile& board) {
    ForbiddenRange range;
    const Node name = object.need("dimension");
    std::vector<std::string_view> names;
    for (const DimensionDescription& dimension : board.dimensions) names.push_back(dimension.name);
    const std::size_t index = names.empty() ? 0 : name.word(names);
    if (index < names.size()) range.dimension = names[index];
    std::int64_t lowest = 0;
    std::int64_t highest = highest_code;
    const FieldDescription* field = field_of(board, range.dimension);
    if (field != nullptr) {
        lowest = field->lowest_allowed();
        highest = std::min<std::int64_t>(field->highest_allowed(), highest_code);
    }
    const auto code = [&](std::string_view key) -> std::optional<std::int32_t> {
        const Node node = object.need(key);
        const std::int64_t value = node.integer({0, highest_code});
        if (value >= lowest && value <= highest) return static_cast<std::int32_t>(value);
        node.complain(node.described(), "a code of " + range.dimension + ", " +
                                            std::to_string(lowest) + " to " +
                                            std::to_string(highest));
        return {};
    };
    const auto from = code("lowest");
    const auto to = code("highest");
    if (from && to && *from > *to) {
        const Node node = object.need("highest");
        node.complain(node.described(), "highest not below lowest, " + std::to_string(*from));
    }
    range.lowest = from.value_or(0);
    range.highest = to.value_or(0);
    object.finish();
    return range;
}

bool covers_everything(const BoardFile& board, const ForbiddenCombination& combination) {
    return std::all_of(
        combination.all_of.begin(), combination.all_of.end(),
        [&board](const ForbiddenRange& range) {
            const FieldDescription* field = field_of(board, range.dimension);
            return field != nullptr &&
                   range.lowest <= static_cast<std::int64_t>(field->lowest_allowed()) &&
                   range.highest >= static_cast<std::int64_t>(field->highest_allowed());
        });
}

// True if the reset values of all fields named are stated and lie in the ranges.
bool holds_after_reset(const BoardFile& board, const ForbiddenCombination& combination) {
    return std::all_of(combination.all_of.begin(), combination.all_of.end(),
                       [&board](const ForbiddenRange& range) {
                           const FieldDescription* field = field_of(board, range.dimension);
                           return field != nullptr && field->reset &&
                                  std::int64_t{*field->reset} >= range.lowest &&
                                  std::int64_t{*field->reset} <= range.highest;
                       });
}

}  // namespace

void decode_dimensions(const Object& top, BoardFile& board) {
    const List list = top.list("dimensions");
    if (list.node().is_list() && list.size() == 0)
        list.node().complain("an empty list", "at least one tuned dimension");
    for (const Node node : list) board.dimensions.push_back(decode_dimension(node.object(), board));

    for (const RegisterDescription& reg : board.map.registers) {
        for (const FieldDescription& field : reg.fields) {
            const FieldName name{reg.name, field.name};
            const bool named =
                std::any_of(board.dimensions.begin(), board.dimensions.end(),
                            [&name](const auto& dimension) { return dimension.field == name; });
            if (field.role == Role::tuned && !named)
                list.node().complain("no dimension for the tuned field " + name.text(),
                                     "a dimension for every tuned field");
        }
    }
}

void decode_forbidden(const Object& top, BoardFile& board) {
    for (const Node node : top.list_or_empty("forbidden")) {
        const Object object = node.object();
        ForbiddenCombination combination;
        const List ranges = object.list("all_of");
        if (ranges.node().is_list() && ranges.size() == 0)
            ranges.node().complain("an empty list", "at least one range of codes",
                                   "as it stands it would forbid every combination");
        for (const Node range_node : ranges) {
            ForbiddenRange range = decode_range(range_node.object(), board);
            const auto& others = combination.all_of;
            if (std::any_of(others.begin(), others.end(), [&range](const auto& other) {
                    return !range.dimension.empty() && other.dimension == range.dimension;
                }))
                range_node.complain("dimension " + range.dimension + " twice",
                                    "each dimension once in a combination");
            combination.all_of.push_back(std::move(range));
        }
        combination.why = object.text_or("why", "");
        object.finish();
        if (!combination.all_of.empty()) {
            if (covers_everything(board, combination))
                node.complain("ranges that cover all codes", "codes that remain allowed");
            else if (holds_after_reset(board, combination))
                node.complain("a combination that holds for the reset codes",
                              "reset codes that are allowed",
                              "restoring them after a reset would be refused");
        }
        board.forbidden.push_back(std::move(combination));
    }
}

}  // namespace lanewright
