#pragma once
// Purpose:   what the columns of a file of margins mean, as the user's column map says: which
//            column holds what, in which unit, and what is known of how it was measured.
// Ownership: values only; the file's full text is kept for the manifest.
// Threads:   no shared state.
// Errors:    every complaint of a file at once, with line and column; a file with complaints gives
//            no map.

#include <array>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "adapt/values/values.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/config/json_reader.hpp"

namespace lanewright {

// Something that is said once for the whole file, stands in a column, or is not known.
struct Stated {
    enum class Kind : std::uint8_t { unknown, value, column };
    Kind kind = Kind::unknown;
    std::string text;  // the value as text, or the column's name
};

enum class Unit : std::uint8_t { millivolt, volt, microvolt, unit_interval, milli_ui, picosecond };

struct MarginColumn {
    std::string column, std_error, bound;  // names; the latter two may be empty
    Unit unit = Unit::millivolt;
    double scale = 1;  // of a monitor that logs steps: the step in that unit
};

// In the order of margin_names.
enum class MarginName : std::uint8_t { up, down, left, right, height, width };
inline constexpr std::array margin_names{"up", "down", "left", "right", "height", "width"};

struct CodeColumn {
    std::string dimension, column;
};

struct ColumnMap {
    std::string path, source;  // where it was read, and its full text
    std::string name, description;
    char separator = ',';
    Stated lane, error_definition, error_ratio, condition, simulated;
    std::string pattern;  // "unknown" where it is
    std::vector<CodeColumn> codes;
    std::map<MarginName, MarginColumn> margins;
    std::map<MarginName, MarginColumn> slopes;            // of up, down, left, right
    std::map<std::string, std::string> optional_columns;  // "ordinal", "status", ... -> column
    std::map<std::string, Stated> tags;
    // What a board file would say, where there is none.
    std::optional<BoardFile> board;
};

std::optional<ColumnMap> load_columns(const std::string& path, Complaints& complaints);
// `complaints` is the one the document was parsed with.
std::optional<ColumnMap> decode_columns(const Document& document, Complaints& complaints);

// What one unit of the column is in mV or UI.
double factor_of(const MarginColumn& column, double bit_rate_gbps);

}  // namespace lanewright
