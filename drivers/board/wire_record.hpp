#pragma once
// Purpose:   the record of what went over the wire for a reading, operation by operation.
// Ownership: values only.
// Threads:   no shared state.

#include <vector>

#include "drivers/board/lane_reader.hpp"
#include "drivers/registers/batch.hpp"

namespace lanewright {

// One entry for each operation that was begun.
std::vector<WireOperation> wire_record(const Batch& batch, const BatchReply& reply);

}  // namespace lanewright
