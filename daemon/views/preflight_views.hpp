#pragma once
// Purpose:   what the preflight of a run found, and what the lanes' references told since, as text
//            for people and as JSON for programs.
// Ownership: values only.
// Threads:   no shared state.

#include <nlohmann/json_fwd.hpp>
#include <string>
#include <vector>

#include "daemon/views/lane_result.hpp"

namespace lanewright {

// All items, those that lanes have in common in one line; at most 80 columns. Nothing where none is
// stored.
std::string preflight_table(const RunView& view);

// One line that says how it went, and in full what did not simply pass; for `show` of a tune.
std::string preflight_summary(const RunView& view);

// {"passed": ..., "one_at_a_time": ..., "noise": ..., "items": [...]}; null where nothing is
// stored.
nlohmann::ordered_json preflight_json(const RunView& view);

// The object that `check --measure --json` prints.
nlohmann::ordered_json measured_json(const RunView& view);

// {"basis": "measured" or "declared", "height_sigma_mv": ..., "from": run}
nlohmann::ordered_json noise_json(const RunView& view, const LaneState& lane);

// {"reading_count": ..., "shifts": [...]}
nlohmann::ordered_json reference_json(const RunView& view, const LaneState& lane);

// What a reader of the lane's result should know of its reference, resets and noise.
std::vector<std::string> reference_notes(const RunView& view, const LaneState& lane);

// No item failed. True where none is stored.
bool preflight_passed(const RunState& state);

// The noise that holds for a lane: measured, else declared.
MonitorNoise noise_of(const RunView& view, const LaneState& lane);

}  // namespace lanewright
