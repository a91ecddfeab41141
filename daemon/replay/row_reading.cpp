#include "daemon/replay/row_reading.hpp"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <limits>
#include <utility>

#include "adapt/search/text.hpp"

namespace lanewright {

namespace {

constexpr std::int64_t highest_lane = 1023;

using Edge = std::optional<Measured> Reading::*;
constexpr std::array<Edge, 6> edges{&Reading::up_mv,    &Reading::down_mv,   &Reading::left_ui,
                                    &Reading::right_ui, &Reading::height_mv, &Reading::width_ui};
constexpr std::array<Measured EdgeSlopes::*, 4> slope_members{
    &EdgeSlopes::up_mv, &EdgeSlopes::down_mv, &EdgeSlopes::left_ui, &EdgeSlopes::right_ui};

bool is_height(MarginName name) {
    return name == MarginName::up || name == MarginName::down || name == MarginName::height;
}

double error_ratio(const Cells& cells, const std::string& column) {
    const double ratio = cells.number(column);
    if (ratio > 0 && ratio <= 0.5) return ratio;
    throw BadRow(column, "found " + shown(cells.text(column)) +
                             ", expected an error ratio above 0, at most 0.5");
}

double not_negative(const Cells& cells, const std::string& column) {
    const double value = cells.number(column);
    if (value >= 0) return value;
    throw BadRow(column, "found " + shown(cells.text(column)) + ", expected 0 or above");
}

// `column` may be empty, and the cell.
Bound bound(const Cells& cells, const std::string& column) {
    if (column.empty() || cells.empty(column)) return Bound::exact;
    return static_cast<Bound>(cells.word(column, {"exact", "at_most", "at_least"}));
}

// One look of a counting monitor, "PHASE_UI:OFFSET_MV:BITS:ERRORS", a plus behind saturated ones.
bool parse_look(std::string_view text, Count& count) {
    count.saturated = text.ends_with('+');
    if (count.saturated) text.remove_suffix(1);
    const char* at = text.data();
    const char* const end = at + text.size();
    const auto take = [&](auto& value, bool last) {
        const auto [stopped, error] = std::from_chars(at, end, value);
        const bool good =
            error == std::errc() && (last ? stopped == end : stopped != end && *stopped == ':');
        at = good && !last ? stopped + 1 : stopped;
        return good;
    };
    return take(count.look.phase_ui, false) && take(count.look.offset_mv, false) &&
           take(count.look.bits, false) && take(count.errors, true) &&
           std::isfinite(count.look.phase_ui) && std::isfinite(count.look.offset_mv);
}

// No receiver sees a side of an eye beyond this, and no side is wider than a bit.
constexpr double most_side_mv = 10000, most_side_ui = 1;

void check_possible(MarginName name, double value, const std::string& column, const Cells& cells) {
    const bool whole = name == MarginName::height || name == MarginName::width;
    const double most = (is_height(name) ? most_side_mv : most_side_ui) * (whole ? 2 : 1);
    if (std::abs(value) <= most) return;
    const char* const unit = is_height(name) ? " mV" : " UI";
    throw BadRow(column, "found " + shown(cells.text(column)) + ", which is " + general(value, 6) +
                             unit + "; expected at most " + general(most, 6) + unit +
                             " to either side; is the unit right?");
}

// An open eye has an opening in both directions.
void check_open(const Reading& reading) {
    if (reading.status != Status::open && reading.status != Status::saturated) return;
    const auto negative = [](const std::optional<Measured>& whole,
                             const std::optional<Measured>& one,
                             const std::optional<Measured>& other) {
        return (whole && whole->value < 0) || (one && other && one->value + other->value < 0);
    };
    const bool height = negative(reading.height_mv, reading.up_mv, reading.down_mv);
    if (!height && !negative(reading.width_ui, reading.left_ui, reading.right_ui)) return;
    throw BadRow({}, std::string("an open eye of negative ") + (height ? "height" : "width") +
                         ", expected 0 or above, or the status closed");
}

std::vector<Count> counts(const Cells& cells, const std::string& column) {
    std::vector<Count> out;
    std::string_view left = cells.text(column);
    while (!left.empty()) {
        const std::string_view one = left.substr(0, left.find(' '));
        left.remove_prefix(std::min(one.size() + 1, left.size()));
        if (!parse_look(one, out.emplace_back())) {
            throw BadRow(column, "found " + shown(one) +
                                     ", expected looks as PHASE_UI:OFFSET_MV:BITS:ERRORS");
        }
    }
    return out;
}

}  // namespace

std::vector<std::string> RowReader::columns() const {
    std::vector<std::string> out;
    const auto add = [&](const std::string& name) {
        if (!name.empty() && std::find(out.begin(), out.end(), name) == out.end())
            out.push_back(name);
    };
    for (const Stated* each : {&columns_.lane, &columns_.error_definition, &columns_.error_ratio,
                               &columns_.condition, &columns_.simulated}) {
        if (each->kind == Stated::Kind::column) add(each->text);
    }
    for (const CodeColumn& code : columns_.codes) add(code.column);
    for (const auto* margins : {&columns_.margins, &columns_.slopes}) {
        for (const auto& [name, margin] : *margins) {
            add(margin.column);
            add(margin.std_error);
            add(margin.bound);
        }
    }
    for (const auto& [name, column] : columns_.optional_columns) add(column);
    for (const auto& [key, tag] : columns_.tags) {
        if (tag.kind == Stated::Kind::column) add(tag.text);
    }
    return out;
}

std::string RowReader::stated(const Stated& what, const Cells& cells) const {
    return what.kind == Stated::Kind::column ? std::string(cells.text(what.text)) : what.text;
}

// The column's name where the map has it and the cell is not empty.
const std::string* RowReader::optional(const char* name, const Cells& cells) const {
    const auto found = columns_.optional_columns.find(name);
    if (found == columns_.optional_columns.end() || cells.empty(found->second)) return nullptr;
    return &found->second;
}

Codes RowReader::codes(const Cells& cells) const {
    Codes out;
    for (const DimensionDescription& dimension : board_.dimensions) {
        const auto column =
            std::find_if(columns_.codes.begin(), columns_.codes.end(),
                         [&](const CodeColumn& each) { return each.dimension == dimension.name; });
        const FieldDescription* field = board_.map.find(dimension.field);
        out.value.push_back(static_cast<std::int32_t>(
            cells.integer(column->column, field->lowest_allowed(), field->highest_allowed())));
    }
    if (space_.allows(out)) return out;
    std::string text;
    for (std::size_t i = 0; i < out.value.size(); ++i) {
        text +=
            (i == 0 ? "" : ", ") + board_.dimensions[i].name + " " + std::to_string(out.value[i]);
    }
    throw BadRow({}, text + ": a combination that the file of board " + board_.name +
                         " forbids; expected codes that it allows");
}

// One standard deviation where the file has no column of it: the monitor's step and repeatability.
double RowReader::noise_of(MarginName name) const {
    const StepSize& size = is_height(name) ? board_.monitor.height : board_.monitor.width;
    const bool whole = name == MarginName::height || name == MarginName::width;
    const double edges_blurred = whole ? 2 : 1;
    return std::sqrt(size.size * size.size / 12 + edges_blurred * size.sigma * size.sigma);
}

std::optional<Measured> RowReader::margin(MarginName name, const Cells& cells) const {
    const auto found = columns_.margins.find(name);
    if (found == columns_.margins.end() || cells.empty(found->second.column)) return std::nullopt;
    const MarginColumn& column = found->second;
    const double factor = factor_of(column, board_.bit_rate_gbps);
    Measured out;
    out.value = cells.number(column.column) * factor;
    out.bound = bound(cells, column.bound);
    check_possible(name, out.value, column.column, cells);
    if (column.std_error.empty()) {
        out.std_error = noise_of(name);
    } else if (!cells.empty(column.std_error)) {
        out.std_error = not_negative(cells, column.std_error) * factor;
    } else if (out.bound == Bound::exact) {
        throw BadRow(column.std_error,
                     "nothing, expected the standard error of " +
                         std::string(margin_names[static_cast<std::size_t>(name)]));
    } else {
        out.std_error = std::numeric_limits<double>::infinity();
    }
    return out;
}

void RowReader::margins(const Cells& cells, Reading& reading) const {
    for (std::size_t i = 0; i < edges.size(); ++i) {
        reading.*edges[i] = margin(static_cast<MarginName>(i), cells);
    }
    const bool four = reading.up_mv && reading.down_mv && reading.left_ui && reading.right_ui;
    const bool any = reading.up_mv || reading.down_mv || reading.left_ui || reading.right_ui;
    const bool two = reading.height_mv && reading.width_ui;
    reading.centred_assumed = two && !any;
    const bool none = !any && !reading.height_mv && !reading.width_ui;
    if (four || reading.centred_assumed || none) return;
    throw BadRow({},
                 "only some of its margins are there; expected up, down, left and right, or "
                 "height and width");
}

void RowReader::slopes(const Cells& cells, Reading& reading) const {
    if (columns_.slopes.empty()) return;
    EdgeSlopes out;
    for (std::size_t i = 0; i < slope_members.size(); ++i) {
        const MarginColumn& column = columns_.slopes.at(static_cast<MarginName>(i));
        if (cells.empty(column.column)) return;  // a reading without slopes
        const double factor = factor_of(column, board_.bit_rate_gbps);
        Measured& slope = out.*slope_members[i];
        slope.value = cells.number(column.column) * factor;
        if (!column.std_error.empty()) {
            slope.std_error = cells.empty(column.std_error)
                                  ? std::numeric_limits<double>::infinity()
                                  : not_negative(cells, column.std_error) * factor;
        }
        slope.bound = bound(cells, column.bound);
    }
    reading.slopes = out;
}

void RowReader::status(const Cells& cells, Reading& reading) const {
    const bool some = reading.up_mv || reading.height_mv;
    if (const std::string* column = optional("status", cells)) {
        reading.status = static_cast<Status>(
            cells.word(*column, {"open", "closed", "no_lock", "saturated", "void"}));
        if (reading.status == Status::void_reading)
            throw BadRow(*column, "a void reading, which is none");
        const bool opens = reading.status == Status::open || reading.status == Status::saturated;
        if (opens && !some) throw BadRow(*column, "an open eye without margins");
        return;
    }
    if (!some) throw BadRow({}, "no margin, and no status that says why");
    bool closed = false, saturated = false;
    for (const Edge edge : edges) {
        if (!(reading.*edge)) continue;
        const Measured& margin = *(reading.*edge);
        closed = closed || margin.bound == Bound::at_most || margin.value <= 0;
        saturated = saturated || margin.bound == Bound::at_least;
    }
    reading.status = closed ? Status::closed : saturated ? Status::saturated : Status::open;
}

void RowReader::circumstances(const Cells& cells, Reading& reading) const {
    constexpr auto most = std::numeric_limits<std::int64_t>::max();
    if (columns_.error_ratio.kind == Stated::Kind::column) {
        reading.error_ratio = error_ratio(cells, columns_.error_ratio.text);
    } else if (columns_.error_ratio.kind == Stated::Kind::value) {
        reading.error_ratio = std::stod(columns_.error_ratio.text);
    }
    reading.error_definition = ErrorDefinition::unknown;
    if (columns_.error_definition.kind == Stated::Kind::column) {
        reading.error_definition = static_cast<ErrorDefinition>(
            cells.word(columns_.error_definition.text, {"pattern", "decision", "unknown"}));
    } else if (columns_.error_definition.kind == Stated::Kind::value) {
        reading.error_definition = columns_.error_definition.text == "pattern"
                                       ? ErrorDefinition::pattern
                                       : ErrorDefinition::decision;
    }
    if (const std::string* column = optional("basis", cells)) {
        reading.basis = static_cast<Basis>(cells.word(*column, {"counted", "extrapolated"}));
    }
    if (const std::string* column = optional("centre_error_ratio", cells)) {
        reading.centre_error_ratio = error_ratio(cells, *column);
    }
    if (const std::string* column = optional("counts", cells)) {
        reading.counts = counts(cells, *column);
    }
    if (const std::string* column = optional("bit_count", cells)) {
        reading.bit_count = static_cast<std::uint64_t>(cells.integer(*column, 0, most));
    }
    if (const std::string* column = optional("cost_s", cells)) {
        reading.cost_s = not_negative(cells, *column);
    }
}

bool RowReader::is_no_margin(const Cells& cells) const {
    const std::string* stage = optional("stage", cells);
    if (stage == nullptr) return false;
    const std::string_view word = cells.text(*stage);
    if (word != "preflight" && word != "reference") return false;
    const auto there = [&](MarginName name) {
        const auto found = columns_.margins.find(name);
        return found != columns_.margins.end() && !cells.empty(found->second.column);
    };
    const bool four = there(MarginName::up) && there(MarginName::down) && there(MarginName::left) &&
                      there(MarginName::right);
    return !four && !(there(MarginName::height) && there(MarginName::width));
}

LoggedRow RowReader::read(const Cells& cells) const {
    LoggedRow row;
    row.lane = columns_.lane.kind == Stated::Kind::column
                   ? static_cast<std::uint16_t>(cells.integer(
                         columns_.lane.text, 0,
                         std::min<std::int64_t>(highest_lane, board_.map.lane_count - 1)))
                   : static_cast<std::uint16_t>(std::stoul(columns_.lane.text));
    row.reading.codes = codes(cells);
    margins(cells, row.reading);
    status(cells, row.reading);
    check_open(row.reading);
    slopes(cells, row.reading);
    circumstances(cells, row.reading);
    const auto ordinal = columns_.optional_columns.find("ordinal");
    if (ordinal != columns_.optional_columns.end()) {
        row.ordinal = static_cast<std::uint32_t>(
            cells.integer(ordinal->second, 0, std::numeric_limits<std::uint32_t>::max()));
    }
    if (const std::string* column = optional("stage", cells)) {
        row.stage = static_cast<Stage>(
            cells.word(*column, {"search", "compare", "preflight", "reference"}));
    }
    if (const std::string* column = optional("height_sigma_mv", cells)) {
        row.height_sigma_mv = not_negative(cells, *column);
    }
    if (const std::string* column = optional("width_sigma_ui", cells)) {
        row.width_sigma_ui = not_negative(cells, *column);
    }
    if (const std::string* column = optional("why", cells)) row.why = cells.text(*column);
    row.condition = stated(columns_.condition, cells);
    for (const auto& [key, tag] : columns_.tags) row.tags[key] = stated(tag, cells);
    row.simulated =
        columns_.simulated.kind == Stated::Kind::column
            ? cells.word(columns_.simulated.text, {"false", "true", "0", "1", "no", "yes"}) % 2 == 1
            : columns_.simulated.text == "true";
    return row;
}

}  // namespace lanewright
