#include "sim_target/target_file.hpp"

#include <catch2/catch.hpp>
#include <sstream>

#include "sim_target/truth_report.hpp"
#include "tests/sim_target/physics_support.hpp"

using namespace lanewright;
using namespace lanewright::sim;
using Catch::Matchers::Contains;

namespace {

std::string complaints_of(const nlohmann::json& json) {
    Complaints complaints;
    const auto target = parse_target(json.dump(1), "target.json", complaints);
    CHECK(target.has_value() == !complaints.any());
    return complaints.text();
}

}  // namespace

TEST_CASE("the demo target reads as it is written") {
    const TargetFile target = target_of(demo_json());
    CHECK(target.grid.bit_rate_hz == 25e9);
    CHECK(target.receiver.banks[bank_r1].bits == 5);
    CHECK(target.receiver.banks[bank_c1].kind == BankKind::capacitor);
    CHECK(target.receiver.banks[bank_c1].fixed == Approx(20e-15));
    CHECK(target.lanes[1].line.impedance_ohm == 47);
    CHECK(target.lanes[1].line.loss_tangent == 0.0075);  // shared by all lines
    CHECK(target.folder == LANEWRIGHT_SOURCE_DIR "/configs/targets");
    CHECK(complaints_of(demo_json()).empty());
}

TEST_CASE("the demo's banks cover the stated ranges") {
    const TargetFile target = target_of(demo_json());
    const auto& banks = target.receiver.banks;
    CHECK(nominal_table(banks[bank_r1]).front() == Approx(2200));
    CHECK(nominal_table(banks[bank_r1]).back() == Approx(150).epsilon(0.01));
    CHECK(nominal_table(banks[bank_r2]).front() == Approx(1100));
    CHECK(nominal_table(banks[bank_r2]).back() == Approx(110).epsilon(0.01));
    CHECK(nominal_table(banks[bank_c1]).back() == Approx(420e-15).epsilon(0.01));
    CHECK(nominal_table(banks[bank_c2]).back() == Approx(70e-15).epsilon(0.01));
}

TEST_CASE("every mistake of a target file is named at once") {
    auto json = demo_json();
    json["format"] = "lanewright-target/9";
    json["bit_rate_gbps"] = 0;
    json["transmiter"] = 1;
    json["transmitter"].erase("swing_mv");
    json["receiver"]["banks"]["c1"]["unit_ohm"] = 5;
    json["reset_codes"]["r1"] = 32;
    json["lanes"][0]["touchstone"] = {{"file", "a.s4p"}, {"near", {1, 2}}, {"far", {2, 3}}};
    json["lanes"][1] = nlohmann::json::object();
    json["monitor"]["error_ratio"] = 0.5;
    const std::string text = complaints_of(json);
    CHECK_THAT(text, Contains("/format"));
    CHECK_THAT(text, Contains("/bit_rate_gbps"));
    CHECK_THAT(text, Contains("transmiter"));
    CHECK_THAT(text, Contains("swing_mv"));
    CHECK_THAT(text, Contains("/receiver/banks/c1"));
    CHECK_THAT(text, Contains("/reset_codes/r1"));
    CHECK_THAT(text, Contains("both line and touchstone"));
    CHECK_THAT(text, Contains("port 2 in the pairs twice"));
    CHECK_THAT(text, Contains("neither line nor touchstone"));
    CHECK_THAT(text, Contains("/monitor/error_ratio"));
}

TEST_CASE("sections of the wrong kind, too many bits and no lanes are complaints") {
    auto json = demo_json();
    json["lanes"] = nlohmann::json::array();
    CHECK_THAT(complaints_of(json), Contains("from 1 to 64 lanes"));
    json = demo_json();
    json["receiver"] = 7;
    CHECK_THAT(complaints_of(json), Contains("/receiver"));
    json = demo_json();
    json["receiver"]["banks"]["c2"]["bits"] = 8;
    CHECK_THAT(complaints_of(json), Contains("at most 18 bits"));
    CHECK_FALSE(complaints_of(nlohmann::json::array()).empty());
    CHECK_FALSE(complaints_of(nlohmann::json::object()).empty());
}

TEST_CASE("the reader of the board's side sees the whole file and may complain") {
    auto json = demo_json();
    json["wire"] = {{"latency_ms", -1}};
    Complaints complaints;
    bool called = false;
    const auto reader = [&](const Object& top) {
        called = true;
        for (const char* key : {"board", "binding", "faults"}) top.find(key);
        const Object wire = top.object("wire");
        wire.number("latency_ms", {.at_least = 0});
        wire.finish();
    };
    CHECK_FALSE(parse_target(json.dump(), "target.json", complaints, reader));
    CHECK(called);
    CHECK_THAT(complaints.text(), Contains("/wire/latency_ms"));
}

TEST_CASE("codes on the command line name every dimension once and stay inside") {
    const std::vector<int> counts = {32, 16, 16, 8};
    std::string problem;
    const auto codes = codes_from_text("r1=9,r2=15,c1=14,c2=0", counts, problem);
    REQUIRE(codes);
    CHECK(*codes == std::vector<int>{9, 14, 15, 0});
    for (const char* bad : {"", "r1", "r1=9", "r1=9,r2=15,c1=15,c2=8", "r1=9,r1=9,c1=1,c2=0",
                            "r1=x,r2=15,c1=15,c2=0", "r1=9,r2=15,c1=15,c3=0", "r1=9,",
                            "r1=-1,r2=15,c1=15,c2=0", "r1=99999999999,r2=15,c1=15,c2=0"}) {
        problem.clear();
        CHECK_FALSE(codes_from_text(bad, counts, problem));
        CHECK_FALSE(problem.empty());
    }
}

TEST_CASE("requirements on the command line replace only what they name") {
    const Required file{40, 0.4, 1e-6};
    std::string problem;
    const auto required = required_from_text("width_ui=0.25", file, problem);
    REQUIRE(required);
    CHECK(required->height_mv == 40);
    CHECK(required->width_ui == 0.25);
    for (const char* bad : {"height_mv=0", "width_ui=2", "error_ratio=0.3", "height=3", "=",
                            "height_mv=nan", "height_mv=inf", "error_ratio=-1e-6"}) {
        problem.clear();
        CHECK_FALSE(required_from_text(bad, file, problem));
        CHECK_FALSE(problem.empty());
    }
}

TEST_CASE("truth is written as one JSON object and as lines of values") {
    CodesScore result;
    result.codes = {9, 14, 15, 0};
    result.margins.locked = true;
    result.margins.closed = false;
    result.margins.up_mv = 21.5;
    result.margins.down_mv = 20.5;
    result.score = 1.25;
    const TruthHeading heading{"x", 3, "codes", 8.5, {40, 0.4, 1e-6}};
    std::ostringstream out;
    write_truth(out, TruthFormat::json, heading, std::vector<CodesScore>{result});
    const auto json = nlohmann::json::parse(out.str());
    CHECK(json["lane"] == 3);
    CHECK(json["simulated"] == true);
    CHECK(json["required"]["height_mv"] == 40);
    CHECK(json["results"][0]["codes"]["c1"] == 14);
    CHECK(json["results"][0]["height_mv"] == 42);
    CHECK(json["results"][0]["status"] == "open");
    std::ostringstream csv;
    write_truth(csv, TruthFormat::csv, heading, std::vector<CodesScore>{result});
    CHECK_THAT(csv.str(), Catch::StartsWith("r1,c1,r2,c2,status,up_mv,"));
    CHECK_THAT(csv.str(), Contains("\n9,14,15,0,open,21.5,20.5,"));
}

TEST_CASE("what is broken on purpose must fit the lanes and banks there are") {
    auto json = demo_json();
    json["failures"] = {
        {"no_lock", {8}},
        {"swapped", {{0, 1}, {1, 2}}},
        {"foreign_writes", {{{"lane", 0}, {"dimension", "c2"}, {"code", 8}, {"at_batches", {1}}}}}};
    json["lock"]["regained_below_ui"] = 0.8;
    const std::string text = complaints_of(json);
    CHECK_THAT(text, Contains("/failures/no_lock/0"));
    CHECK_THAT(text, Contains("/failures/swapped/1"));
    CHECK_THAT(text, Contains("/failures/foreign_writes/0/code"));
    CHECK_THAT(text, Contains("/lock/regained_below_ui"));
}

TEST_CASE("what a target does not say of its monitor and lock is no effect") {
    auto json = demo_json();
    for (const char* key : {"lock", "write_effects", "telemetry"}) json.erase(key);
    json["monitor"] = nlohmann::json::object();
    const TargetFile target = target_of(json);
    CHECK(target.monitor.height_step_mv == 2);
    CHECK(target.monitor.against == ErrorsAgainst::pattern);
    CHECK(target.monitor.event_share == 0);
    CHECK(target.monitor.gain_tolerance == 0);
    CHECK(std::isinf(target.chip.lock.lost_above_ui));
    CHECK(target.chip.write_effects.settle_time_s == 0);
    CHECK(target.chip.failures.clock == ReferenceClock::good);
    CHECK(target.chip.failures.foreign_writes.empty());
}
