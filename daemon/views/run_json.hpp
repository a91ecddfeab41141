#pragma once
// Purpose:   the one encoder of each shape that programs read: run, lane, margin, reading.
// Ownership: values only.
// Threads:   no shared state.

#include <nlohmann/json_fwd.hpp>

#include "daemon/views/lane_result.hpp"

namespace lanewright {

// The object that `tune --json` and `show --json` print; null stands for what is not known.
nlohmann::ordered_json run_json(const RunView& view);

// One entry of `runs --json`.
nlohmann::ordered_json run_summary_json(const RunView& view);

nlohmann::ordered_json lane_json(const RunView& view, const LaneResult& lane);

// {"r1": 9, ...} in the order of the board file.
nlohmann::ordered_json codes_json(const CodeSpace& space, const Codes& codes);

// {"error": {"what": ..., "cause": ..., "exit": ...}}
nlohmann::ordered_json error_json(const Fault& fault, int exit_code);

}  // namespace lanewright
