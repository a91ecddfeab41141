#pragma once
// Purpose:   one row of logged margins as a reading, by the column map.
// Ownership: refers to map and board for its life.
// Threads:   const after construction.
// Errors:    BadRow with column and reason.

#include <map>
#include <optional>
#include <string>

#include "adapt/search/code_space.hpp"
#include "daemon/engine/lane_setup.hpp"
#include "daemon/replay/columns.hpp"
#include "daemon/replay/csv_cells.hpp"
#include "daemon/store/events.hpp"

namespace lanewright {

struct LoggedRow {
    std::size_t line = 0;
    std::uint16_t lane = 0;
    std::uint32_t ordinal = 0;  // where the file has one
    Stage stage = Stage::search;
    std::string why;
    Reading reading;
    std::optional<double> height_sigma_mv, width_sigma_ui;  // repeatability, where the file has it
    // What tells the runs apart.
    std::string condition;
    std::map<std::string, std::string> tags;
    bool simulated = false;
};

class RowReader {
  public:
    RowReader(const ColumnMap& columns, const BoardFile& board)
        : columns_(columns), board_(board), space_(code_space_of(board)) {}

    // Every column that the map names, each once.
    std::vector<std::string> columns() const;

    // A row of the preflight or the reference without all its margins, as single looks are: an
    // export holds them beside the readings.
    bool is_no_margin(const Cells& cells) const;

    // Codes that the board forbids and margins that no eye has are BadRow, too.
    LoggedRow read(const Cells& cells) const;

  private:
    std::string stated(const Stated& what, const Cells& cells) const;
    const std::string* optional(const char* name, const Cells& cells) const;
    Codes codes(const Cells& cells) const;
    std::optional<Measured> margin(MarginName name, const Cells& cells) const;
    double noise_of(MarginName name) const;
    void margins(const Cells& cells, Reading& reading) const;
    void slopes(const Cells& cells, Reading& reading) const;
    void status(const Cells& cells, Reading& reading) const;
    void circumstances(const Cells& cells, Reading& reading) const;

    const ColumnMap& columns_;
    const BoardFile& board_;
    CodeSpace space_;
};

}  // namespace lanewright
