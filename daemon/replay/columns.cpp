#include "daemon/replay/columns.hpp"

#include <algorithm>
#include <cstdio>
#include <limits>
#include <utility>

#include "daemon/replay/columns_board.hpp"

namespace lanewright {

namespace {

constexpr std::int64_t highest_lane = 1023;
constexpr NumberRange error_ratio_range{.at_most = 0.5, .above = 0};

// A name that must not be empty.
std::string decode_text(const Node& node, const std::string& what) {
    std::string text = node.text();
    if (node.is_text() && text.empty()) node.complain("an empty text", what);
    return text;
}

std::string decode_column(const Node& node) {
    return decode_text(node, "the name of a column, as in the file's first row");
}

std::string text_of(double value) {
    char text[40];
    std::snprintf(text, sizeof text, "%.17g", value);
    return text;
}

// The value's own decoding, back as the text that a cell would hold.
using DecodeValue = std::string (*)(const Node&);

std::string lane_value(const Node& node) {
    return std::to_string(node.integer({0, highest_lane}));
}
std::string definition_value(const Node& node) {
    return node.word({"pattern", "decision"}) == 0 ? "pattern" : "decision";
}
std::string ratio_value(const Node& node) {
    return text_of(node.number(error_ratio_range));
}
std::string text_value(const Node& node) {
    return decode_text(node, "a text");
}
std::string truth_value(const Node& node) {
    return node.boolean() ? "true" : "false";
}

// {"value": ...}, {"column": "..."} or, where that is allowed, "unknown".
Stated decode_stated(const Node& node, DecodeValue decode, bool may_be_unknown) {
    Stated out;
    const std::string expected = std::string(R"({"value": ...} or {"column": "..."})") +
                                 (may_be_unknown ? R"(, or "unknown")" : "");
    if (node.is_text() && may_be_unknown) {
        if (node.text() != "unknown") node.complain(node.described(), expected);
        return out;
    }
    if (!node.is_object()) {
        node.complain(node.described(), expected);
        return out;
    }
    const Object object = node.object();
    const auto value = object.find("value");
    const auto column = object.find("column");
    if (value.has_value() == column.has_value()) {
        node.complain(node.described(), expected, "one of the two keys, not both");
    } else if (value) {
        out = {Stated::Kind::value, decode(*value)};
    } else {
        out = {Stated::Kind::column, decode_column(*column)};
    }
    object.finish();
    return out;
}

void decode_codes(const List& list, ColumnMap& columns) {
    if (list.node().is_list() && list.size() == 0)
        list.node().complain("an empty list", "a column for every dimension");
    for (const Node node : list) {
        const Object object = node.object();
        const Node dimension = object.need("dimension");
        CodeColumn code{decode_text(dimension, "the name of a dimension"),
                        decode_column(object.need("column"))};
        const bool twice =
            std::any_of(columns.codes.begin(), columns.codes.end(),
                        [&](const CodeColumn& other) { return other.dimension == code.dimension; });
        if (twice && !code.dimension.empty())
            dimension.complain("a second column of " + code.dimension, "each dimension once");
        columns.codes.push_back(std::move(code));
        object.finish();
    }
}

bool is_height(MarginName name) {
    return name == MarginName::up || name == MarginName::down || name == MarginName::height;
}

Unit decode_unit(const Object& object, MarginName name) {
    if (is_height(name)) return static_cast<Unit>(object.word("unit", {"mV", "V", "uV"}));
    return static_cast<Unit>(static_cast<std::size_t>(Unit::unit_interval) +
                             object.word("unit", {"UI", "mUI", "ps"}));
}

MarginColumn decode_margin(const Object& object, MarginName name) {
    MarginColumn out;
    out.column = decode_column(object.need("column"));
    out.unit = decode_unit(object, name);
    out.scale = object.number_or("scale", 1, {.above = 0});
    if (const auto error = object.find("std_error")) out.std_error = decode_column(*error);
    if (const auto bound = object.find("bound")) out.bound = decode_column(*bound);
    object.finish();
    return out;
}

void decode_margins(const Object& object, ColumnMap& columns) {
    for (std::size_t i = 0; i < margin_names.size(); ++i) {
        const auto name = static_cast<MarginName>(i);
        if (const auto margin = object.object_if(margin_names[i])) {
            columns.margins.emplace(name, decode_margin(*margin, name));
        }
    }
    const auto has = [&](MarginName name) { return columns.margins.contains(name); };
    const bool four = has(MarginName::up) && has(MarginName::down) && has(MarginName::left) &&
                      has(MarginName::right);
    const bool two = has(MarginName::height) && has(MarginName::width);
    if (object.node().is_object() && !four && !two) {
        object.node().complain(object.node().described(),
                               "up, down, left and right, or height and width");
    }
    object.finish();
}

void decode_slopes(const Object& object, ColumnMap& columns) {
    for (std::size_t i = 0; i < 4; ++i) {
        const auto name = static_cast<MarginName>(i);
        columns.slopes.emplace(name, decode_margin(object.object(margin_names[i]), name));
    }
    object.finish();
}

void decode_optional(const Object& object, ColumnMap& columns) {
    for (const char* name :
         {"ordinal", "stage", "status", "basis", "centre_error_ratio", "bit_count", "cost_s",
          "counts", "height_sigma_mv", "width_sigma_ui", "why"}) {
        if (const auto node = object.find(name)) {
            columns.optional_columns.emplace(name, decode_column(*node));
        }
    }
    object.finish();
}

void decode_tags(const Object& object, ColumnMap& columns) {
    for (const std::string& key : object.keys()) {
        columns.tags.emplace(key, decode_stated(object.need(key), text_value, false));
    }
    object.finish();
}

void decode_known(const Object& top, ColumnMap& columns) {
    columns.lane = decode_stated(top.need("lane"), lane_value, false);
    columns.error_definition = decode_stated(top.need("error_definition"), definition_value, true);
    columns.error_ratio = decode_stated(top.need("error_ratio"), ratio_value, true);
    columns.condition = decode_stated(top.need("condition"), text_value, true);
    columns.simulated = decode_stated(top.need("simulated"), truth_value, false);
    columns.pattern = decode_text(top.need("pattern"), "a pattern such as PRBS31, or \"unknown\"");
}

// Without a board file the map itself must describe every dimension that it names, and no other.
void check_dimensions(const ColumnMap& columns, const Node& node) {
    for (const DimensionDescription& dimension : columns.board->dimensions) {
        const bool named =
            std::any_of(columns.codes.begin(), columns.codes.end(),
                        [&](const CodeColumn& code) { return code.dimension == dimension.name; });
        if (!named) node.complain("no column of " + dimension.name, "one in /codes");
    }
    for (const CodeColumn& code : columns.codes) {
        const bool described = std::any_of(
            columns.board->dimensions.begin(), columns.board->dimensions.end(),
            [&](const DimensionDescription& each) { return each.name == code.dimension; });
        if (!described)
            node.complain("no description of " + code.dimension, "one in /board/dimensions");
    }
}

}  // namespace

std::optional<ColumnMap> load_columns(const std::string& path, Complaints& complaints) {
    const auto document = Document::load(path, complaints);
    if (!document) return {};
    return decode_columns(*document, complaints);
}

std::optional<ColumnMap> decode_columns(const Document& document, Complaints& complaints) {
    ColumnMap columns;
    columns.path = document.file_name();
    columns.source = document.source();
    const Object top = document.root().object();
    top.word("format", {"lanewright-columns/1"});
    columns.name = decode_text(top.need("name"), "a name, such as the board's");
    columns.description = top.text_or("description", "");
    constexpr char separators[] = {',', ';', '\t'};
    columns.separator = separators[top.word_or("separator", 0, {",", ";", "tab"})];
    decode_known(top, columns);
    decode_codes(top.list("codes"), columns);
    decode_margins(top.object("margins"), columns);
    if (const auto slopes = top.object_if("slopes")) decode_slopes(*slopes, columns);
    if (const auto more = top.object_if("columns")) decode_optional(*more, columns);
    if (const auto tags = top.object_if("tags")) decode_tags(*tags, columns);
    if (const auto board = top.object_if("board")) {
        columns.board = decode_columns_board(*board, columns);
        check_dimensions(columns, board->node());
    }
    top.finish();
    if (complaints.any_of(columns.path)) return {};
    return columns;
}

double factor_of(const MarginColumn& column, double bit_rate_gbps) {
    switch (column.unit) {
        case Unit::millivolt:
        case Unit::unit_interval:
            return column.scale;
        case Unit::volt:
            return column.scale * 1000;
        case Unit::microvolt:
        case Unit::milli_ui:
            return column.scale / 1000;
        case Unit::picosecond:
            break;
    }
    return column.scale * bit_rate_gbps / 1000;
}

}  // namespace lanewright
