#pragma once
// Purpose:   margins that were logged by any other means, made into runs of a store: every row is
//            either a reading or listed with the reason why not.
// Ownership: values only.
// Threads:   one caller at a time.
// Errors:    a Fault for what spoils the whole file (a named column is missing, no header); rows
//            that cannot be taken are in `rejected`.

#include <map>
#include <string>
#include <string_view>
#include <vector>

#include "daemon/replay/columns.hpp"
#include "daemon/store/events.hpp"
#include "daemon/store/manifest.hpp"
#include "daemon/store/store.hpp"
#include "drivers/faults/fault.hpp"

namespace lanewright {

struct RejectedRow {
    std::size_t line = 0;  // on which the row begins, from 1
    std::string column;    // empty: the row as a whole
    std::string reason;    // what was found, what was expected
};

// Rows that differ in condition, in a tag or in being simulated are not one run.
struct ImportedRun {
    std::string condition;  // empty: not known
    std::map<std::string, std::string> tags;
    bool simulated = false;
    std::vector<std::uint16_t> lanes;
    std::size_t row_count = 0;
    std::vector<Event> events;  // lane_saved, then an intent and a reading a row, by lane
};

struct ImportedRows {
    std::vector<ImportedRun> runs;
    std::vector<RejectedRow> rejected;  // in the order of the file
    // Lines of the preflight's and the reference's rows without margins, such as single looks: no
    // readings to replay, and no faults.
    std::vector<std::size_t> not_margins;
    std::size_t row_count = 0;  // without the header
};

// A Fault, too, where a column `simulated` of the file says otherwise than the map does for all
// rows. `board` gives limits, noise and bit rate: the board file's, or the column map's own.
Result<ImportedRows> import_rows(std::string_view csv, const ColumnMap& columns,
                                 const BoardFile& board);

// The manifest of one of them. `board_file` is empty where there is none.
Manifest manifest_of(const ImportedRun& run, const ColumnMap& columns, const BoardFile& board,
                     const SourceFile& board_file, Import from);

// Its end is stored last: a run without one was cut short, and is not replayed.
Task<void> store_run(Store* store, Manifest manifest, std::vector<Event> events);

}  // namespace lanewright
