#pragma once
// Purpose:   the part of a column map that stands in for a board file: dimensions with their
//            limits and tables, noise, costs.
// Ownership: values only.
// Threads:   no shared state.

#include "daemon/replay/columns.hpp"

namespace lanewright {

// A board without link and sequences: each dimension has a register of its own, named after it,
// that carries its limits. Complains as the board file's decoder does.
BoardFile decode_columns_board(const Object& object, const ColumnMap& columns);

}  // namespace lanewright
