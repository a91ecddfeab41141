#include "tests/sim_target/physics_support.hpp"

#include <catch2/catch.hpp>
#include <fstream>

namespace lanewright::sim {

nlohmann::json demo_json() {
    std::ifstream file(LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json");
    REQUIRE(file);
    return nlohmann::json::parse(file);
}

nlohmann::json small_json() {
    nlohmann::json json = demo_json();
    nlohmann::json& banks = json["receiver"]["banks"];
    banks["r1"]["bits"] = 3;
    banks["r1"]["unit_ohm"] = 1010;
    banks["c1"]["bits"] = 3;
    banks["c1"]["unit_ff"] = 57;
    banks["r2"]["bits"] = 3;
    banks["r2"]["unit_ohm"] = 800;
    banks["c2"]["bits"] = 1;
    json["reset_codes"] = {{"r1", 6}, {"c1", 1}, {"r2", 1}, {"c2", 1}};
    return json;
}

TargetFile target_of(const nlohmann::json& json) {
    Complaints complaints;
    const auto target =
        parse_target(json.dump(), LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json", complaints);
    INFO(complaints.text());
    REQUIRE(target);
    return *target;
}

}  // namespace lanewright::sim
