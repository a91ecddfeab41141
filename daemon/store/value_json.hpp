#pragma once
// Purpose:   the one JSON shape of the values that are stored and shown: codes, readings,
//            requests, identities, wire records.
// Ownership: values only. Threads: no shared state.
// Errors:    decoders throw nlohmann::json::exception or StoreError on anything unexpected.

#include <nlohmann/json_fwd.hpp>
#include <optional>
#include <string>
#include <vector>

#include "adapt/search/procedure.hpp"
#include "adapt/values/values.hpp"
#include "drivers/board/lane_reader.hpp"

namespace lanewright {

nlohmann::json to_json_value(const Codes& codes);
nlohmann::json to_json_value(const Request& request);
nlohmann::json to_json_value(const Identity& identity);
nlohmann::json to_json_value(const SavedLane& saved);
nlohmann::json to_json_value(const Decision& decision);
nlohmann::json to_json_value(const MonitorNoise& noise);
nlohmann::json to_json_value(const std::vector<Count>& counts);
nlohmann::json to_json_value(const std::vector<WireOperation>& wire);
nlohmann::json to_json_value(const std::optional<EdgeSlopes>& slopes);  // absent: null
nlohmann::json to_json_value(const std::vector<Telemetry>& telemetry);  // [[name, value], ...]

Codes codes_from(const nlohmann::json& value);
Request request_from(const nlohmann::json& value);
Identity identity_from(const nlohmann::json& value);
SavedLane saved_lane_from(const nlohmann::json& value);
Decision decision_from(const nlohmann::json& value);
MonitorNoise noise_from(const nlohmann::json& value);
std::vector<Count> counts_from(const nlohmann::json& value);
std::vector<WireOperation> wire_from(const nlohmann::json& value);
std::optional<EdgeSlopes> slopes_from(const nlohmann::json& value);
std::vector<Telemetry> telemetry_from(const nlohmann::json& value);

}  // namespace lanewright
