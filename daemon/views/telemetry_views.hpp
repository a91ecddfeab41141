#pragma once
// Purpose:   what the board told beside its margins (die temperature, supply, lock losses), over a
//            lane or a run.
// Ownership: values only.
// Threads:   no shared state.

#include <nlohmann/json_fwd.hpp>
#include <string>
#include <vector>

#include "daemon/engine/run_state.hpp"
#include "daemon/views/lane_result.hpp"

namespace lanewright {

// {"die_temperature_c": {"first": ..., "last": ..., "least": ..., "most": ...}, ...} in the board
// file's order; empty where nothing was told.
nlohmann::ordered_json telemetry_json(const LaneState& lane);

// "telemetry: die_temperature_c 41.25 to 44, supply_v 0.9"; empty where nothing was told.
std::string telemetry_text(const RunView& view);

// The names that readings of the run carry, in the board file's order: columns of the CSV.
std::vector<std::string> telemetry_names(const RunView& view);
std::string telemetry_cells(const std::vector<std::string>& names, const Reading& reading);

}  // namespace lanewright
