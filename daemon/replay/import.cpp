#include "daemon/replay/import.hpp"

#include <unistd.h>

#include <algorithm>
#include <cctype>
#include <set>
#include <tuple>
#include <utility>

#include "daemon/engine/lane_setup.hpp"
#include "daemon/engine/tune.hpp"
#include "daemon/replay/csv.hpp"
#include "daemon/replay/row_reading.hpp"

namespace lanewright {

namespace {

Fault bad_file(std::string what, std::string hint) {
    Fault fault;
    fault.cause = Cause::bad_data;
    fault.what = std::move(what);
    fault.hint = std::move(hint);
    return fault;
}

// Every column that the map names must be there, once.
Result<CsvHeader> header_of(const CsvRow& row, const std::vector<std::string>& needed) {
    CsvHeader header;
    std::set<std::string> twice;
    for (std::size_t i = 0; i < row.fields.size(); ++i) {
        if (!header.emplace(row.fields[i], i).second) twice.insert(row.fields[i]);
    }
    std::vector<std::string_view> names(row.fields.begin(), row.fields.end());
    std::string missing;
    for (const std::string& name : needed) {
        if (twice.contains(name)) {
            return bad_file("two columns are called " + shown(name),
                            "Name each column of the file once");
        }
        if (header.contains(name)) continue;
        const std::string near = nearest_word(name, names);
        missing += (missing.empty() ? "" : ", ") + shown(name);
        if (!near.empty()) missing += " (is it " + shown(near) + "?)";
    }
    if (missing.empty()) return header;
    return bad_file("the file has no column " + missing + ", which the column map names",
                    "Correct the map, or its separator; the names are those of the first row");
}

// Rows of one run, by lane.
struct Group {
    std::map<std::uint16_t, std::vector<LoggedRow>> lanes;
};
using Key = std::tuple<std::string, std::map<std::string, std::string>, bool>;

std::string lower_case(std::string_view text) {
    std::string out(text);
    std::transform(out.begin(), out.end(), out.begin(),
                   [](unsigned char c) { return static_cast<char>(std::tolower(c)); });
    return out;
}

// A simulated margin must never pass for a measured one, nor the other way round: where the map
// states it for all rows, the file's own column of that name must not say otherwise.
class SimulatedCheck {
  public:
    SimulatedCheck(const ColumnMap& columns, const CsvHeader& header) : columns_(columns) {
        if (columns.simulated.kind != Stated::Kind::value) return;
        for (const auto& [name, place] : header) {
            if (lower_case(name) == "simulated") column_ = name;
        }
    }

    Result<void> check(const Cells& cells, std::size_t line) const {
        if (column_.empty()) return {};
        const std::string word = lower_case(cells.text(column_));
        const bool yes = word == "true" || word == "1" || word == "yes";
        const bool no = word == "false" || word == "0" || word == "no";
        const std::string& stated = columns_.simulated.text;
        if (stated == "true" ? !no : !yes) return {};
        return bad_file(
            "the column map " + columns_.path + " says that simulated is " + stated +
                ", but column " + shown(column_) + " says " + shown(cells.text(column_)) +
                " in line " + std::to_string(line),
            "Name that column in the map: \"simulated\": {\"column\": " + shown(column_) + "}");
    }

  private:
    const ColumnMap& columns_;
    std::string column_;
};

Result<void> read_rows(CsvReader& csv, const CsvHeader& header, std::size_t width,
                       const RowReader& reader, const SimulatedCheck& simulated,
                       std::map<Key, Group>& groups, ImportedRows& out) {
    CsvRow row;
    while (csv.next(row)) {
        ++out.row_count;
        if (row.fault.empty() && row.fields.size() != width) {
            row.fault = std::to_string(row.fields.size()) + " fields, expected " +
                        std::to_string(width) + " as in the first row";
        }
        if (!row.fault.empty()) {
            out.rejected.push_back({row.line, {}, row.fault});
            continue;
        }
        const Cells cells(header, row.fields);
        if (auto checked = simulated.check(cells, row.line); !checked) return checked.error();
        if (reader.is_no_margin(cells)) {
            out.not_margins.push_back(row.line);
            continue;
        }
        try {
            LoggedRow logged = reader.read(cells);
            logged.line = row.line;
            Group& group = groups[{logged.condition, logged.tags, logged.simulated}];
            group.lanes[logged.lane].push_back(std::move(logged));
        } catch (const BadRow& bad) {
            out.rejected.push_back({row.line, bad.column(), bad.what()});
        }
    }
    return {};
}

// In order of the file's ordinals, or of its lines where it has none.
void put_in_order(std::vector<LoggedRow>& rows, const std::string* column, ImportedRows& out) {
    if (column == nullptr) {
        std::uint32_t next = 0;
        for (LoggedRow& row : rows) row.ordinal = next++;
        return;
    }
    std::stable_sort(rows.begin(), rows.end(), [](const LoggedRow& one, const LoggedRow& other) {
        return one.ordinal < other.ordinal;
    });
    std::vector<LoggedRow> once;
    for (LoggedRow& row : rows) {
        if (!once.empty() && once.back().ordinal == row.ordinal) {
            out.rejected.push_back({row.line, *column,
                                    "a second reading " + std::to_string(row.ordinal) +
                                        " of lane " + std::to_string(row.lane) +
                                        "; the first is in line " +
                                        std::to_string(once.back().line)});
        } else {
            once.push_back(std::move(row));
        }
    }
    rows = std::move(once);
}

SavedLane found_with(std::uint16_t lane, const Codes& codes, const BoardFile& board) {
    SavedLane saved;
    saved.lane = Lane{lane};
    for (std::size_t i = 0; i < board.dimensions.size(); ++i) {
        const FieldDescription& described = *board.map.find(board.dimensions[i].field);
        SavedField field;
        field.field = board.dimensions[i].field;
        field.value = static_cast<std::uint32_t>(codes.value[i]);
        field.lowest = described.lowest_allowed();
        field.highest = described.highest_allowed();
        field.role = Role::tuned;
        field.dimension = board.dimensions[i].name;
        saved.fields.push_back(std::move(field));
    }
    return saved;
}

void add_lane(std::uint16_t lane, std::vector<LoggedRow>& rows, const BoardFile& board,
              ImportedRun& run) {
    run.lanes.push_back(lane);
    run.row_count += rows.size();
    run.events.push_back(LaneSaved{found_with(lane, rows.front().reading.codes, board)});
    if (rows.front().height_sigma_mv || rows.front().width_sigma_ui) {
        NoiseChosen chosen{Lane{lane}, monitor_noise_of(board), {}};
        if (const auto& sigma = rows.front().height_sigma_mv) chosen.noise.height_sigma_mv = *sigma;
        if (const auto& sigma = rows.front().width_sigma_ui) chosen.noise.width_sigma_ui = *sigma;
        run.events.push_back(std::move(chosen));
    }
    for (LoggedRow& row : rows) {
        Request request;
        request.codes = row.reading.codes;
        request.what = MarginWanted{row.reading.error_ratio, row.reading.bit_count, {}};
        request.why = std::move(row.why);
        run.events.push_back(Intent{Lane{lane}, row.ordinal, 0, row.stage, std::move(request)});
        run.events.push_back(ReadingTaken{Lane{lane}, row.ordinal, 0, std::move(row.reading), {}});
    }
}

// A board file knows dimensions of its own: each must have a column.
Result<void> check_dimensions(const ColumnMap& columns, const BoardFile& board) {
    for (const DimensionDescription& dimension : board.dimensions) {
        const bool named =
            std::any_of(columns.codes.begin(), columns.codes.end(),
                        [&](const CodeColumn& code) { return code.dimension == dimension.name; });
        if (!named) {
            return bad_file("the column map " + columns.path + " has no column for dimension " +
                                dimension.name + " of board " + board.name,
                            "Add it to /codes");
        }
    }
    for (const CodeColumn& code : columns.codes) {
        const bool known = std::any_of(
            board.dimensions.begin(), board.dimensions.end(),
            [&](const DimensionDescription& each) { return each.name == code.dimension; });
        if (!known) {
            return bad_file("the column map " + columns.path + " names dimension " +
                                code.dimension + ", which board " + board.name + " has not",
                            "Correct /codes, or take the board file that the margins belong to");
        }
    }
    return {};
}

}  // namespace

Result<ImportedRows> import_rows(std::string_view text, const ColumnMap& columns,
                                 const BoardFile& board) {
    if (const auto checked = check_dimensions(columns, board); !checked) return checked.error();
    const RowReader reader(columns, board);
    CsvReader csv(text, columns.separator);
    CsvRow first;
    if (!csv.next(first)) {
        return bad_file("the file of readings is empty", "It needs a first row of column names");
    }
    if (!first.fault.empty()) {
        return bad_file("the first row, line " + std::to_string(first.line) +
                            ", is not a row of column names: " + first.fault,
                        "");
    }
    const Result<CsvHeader> header = header_of(first, reader.columns());
    if (!header) return header.error();
    ImportedRows out;
    std::map<Key, Group> groups;
    const SimulatedCheck simulated(columns, *header);
    if (auto read = read_rows(csv, *header, first.fields.size(), reader, simulated, groups, out);
        !read) {
        return read.error();
    }
    const auto ordinal = columns.optional_columns.find("ordinal");
    const std::string* column =
        ordinal == columns.optional_columns.end() ? nullptr : &ordinal->second;
    for (auto& [key, group] : groups) {
        ImportedRun run;
        std::tie(run.condition, run.tags, run.simulated) = key;
        for (auto& [lane, rows] : group.lanes) {
            put_in_order(rows, column, out);
            add_lane(lane, rows, board, run);
        }
        out.runs.push_back(std::move(run));
    }
    std::stable_sort(
        out.rejected.begin(), out.rejected.end(),
        [](const RejectedRow& one, const RejectedRow& other) { return one.line < other.line; });
    return out;
}

Manifest manifest_of(const ImportedRun& run, const ColumnMap& columns, const BoardFile& board,
                     const SourceFile& board_file, Import from) {
    Manifest manifest = manifest_begun_now();
    manifest.board_file = board_file;
    manifest.board = board.name;
    manifest.recipe = "imported";
    manifest.link = "none";
    manifest.identity.simulated = run.simulated;
    manifest.lanes = run.lanes;
    manifest.waves = waves_of(run.lanes);
    manifest.seed = 1;
    manifest.tags = run.tags;
    manifest.condition = run.condition;
    from.pattern = columns.pattern;
    from.condition_known = columns.condition.kind != Stated::Kind::unknown;
    from.error_ratio_known = columns.error_ratio.kind != Stated::Kind::unknown;
    manifest.imported = std::move(from);
    return manifest;
}

Task<void> store_run(Store* store, Manifest manifest, std::vector<Event> events) {
    // As many as are kept in memory twice while they are written.
    constexpr std::size_t rows_a_commit = 4000;
    const RunId run = manifest.run;
    if (auto added = co_await store->add_run(std::move(manifest)); !added) co_return added.error();
    for (std::size_t first = 0; first < events.size(); first += rows_a_commit) {
        const std::size_t end = std::min(first + rows_a_commit, events.size());
        std::vector<Event> some(std::make_move_iterator(events.begin() + static_cast<long>(first)),
                                std::make_move_iterator(events.begin() + static_cast<long>(end)));
        auto storing = store->append(run, std::move(some));
        if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
    }
    RunEnded ended;
    std::vector<Event> last;
    last.push_back(std::move(ended));
    auto storing = store->append(run, std::move(last));
    auto stored = co_await std::move(storing);
    if (!stored) co_return stored.error();
    co_return Result<void>{};
}

}  // namespace lanewright
