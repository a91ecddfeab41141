#pragma once
// Purpose:   what the tests of the target's physics share: targets made from the demo's.
// Ownership: values only.
// Threads:   pure functions.

#include <nlohmann/json.hpp>

#include "sim_target/target_file.hpp"

namespace lanewright::sim {

nlohmann::json demo_json();

// The demo with fewer bits in its banks (1,024 codes a lane), quick enough to sweep in a test.
nlohmann::json small_json();

// Fails the running test if the text is no good target.
TargetFile target_of(const nlohmann::json& json);

}  // namespace lanewright::sim
