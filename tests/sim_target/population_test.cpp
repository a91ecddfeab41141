#include <catch2/catch.hpp>
#include <set>

#include "sim_target/physics/truth.hpp"
#include "sim_target/target_file.hpp"
#include "tests/sim_target/physics_support.hpp"

using namespace lanewright;
using namespace lanewright::sim;

namespace {

TargetFile committed(const std::string& name) {
    Complaints complaints;
    const auto target =
        load_target(LANEWRIGHT_SOURCE_DIR "/configs/targets/" + name + ".json", complaints);
    INFO(complaints.text());
    REQUIRE(target);
    return *target;
}

}  // namespace

TEST_CASE("a population gives boards of the stated size, half of their lanes outside") {
    for (const std::string name : {"population", "population_hard"}) {
        const TargetFile target = committed(name);
        REQUIRE(target.population);
        CHECK(target.population->boards == 25);
        for (const int board : {0, 7, 24}) {
            const TargetFile one = population_board(target, board);
            REQUIRE(one.lanes.size() == 8);
            int outside = 0;
            for (const LaneChannel& lane : one.lanes) {
                outside += lane.outside_plain ? 1 : 0;
                CHECK(lane.near_package.has_value() == lane.outside_plain);
                CHECK((lane.near_stub || lane.far_stub) == lane.outside_plain);
                CHECK((lane.line.roughness_um > 0) == lane.outside_plain);
                CHECK(lane.line.length_mm >= target.population->length_mm.from);
                CHECK(lane.line.length_mm <= target.population->length_mm.to);
                CHECK(lane.swing_mv >= 800);
                CHECK(lane.swing_mv <= 1200);
                CHECK(lane.knee_mv >= 200);
                CHECK(lane.knee_mv <= 450);
                CHECK(lane.crosstalk.size() >= 2);
            }
            CHECK(outside == 4);
        }
        CHECK_THROWS_AS(population_board(target, 25), std::out_of_range);
    }
}

TEST_CASE("a board of a population is the same whichever was asked for before") {
    const TargetFile target = committed("population");
    const TargetFile alone = population_board(target, 3);
    const TargetFile after = population_board(population_board(target, 9), 3);
    CHECK(alone.seed == after.seed);
    for (std::size_t lane = 0; lane < alone.lanes.size(); ++lane)
        CHECK(alone.lanes[lane].line.length_mm == after.lanes[lane].line.length_mm);
    CHECK(Oracle(alone, 2).margins({9, 5, 7, 3}, 1e-6).up_mv ==
          Oracle(after, 2).margins({9, 5, 7, 3}, 1e-6).up_mv);
    CHECK(target.lanes.size() == 8);
    CHECK(target.board == 0);
}

TEST_CASE("boards of a population differ in seed and lanes") {
    const TargetFile target = committed("population");
    std::set<std::uint64_t> seeds;
    std::set<double> lengths;
    for (int board = 0; board < 25; ++board) {
        const TargetFile one = population_board(target, board);
        seeds.insert(one.seed);
        for (const LaneChannel& lane : one.lanes) lengths.insert(lane.line.length_mm);
    }
    CHECK(seeds.size() == 25);
    CHECK(lengths.size() == 200);
}

TEST_CASE("a board number that does not fit is told, not taken") {
    TargetFile target = committed("population");
    CHECK(choose_board(target, -1).empty());
    CHECK(choose_board(target, 4).empty());
    CHECK(target.board == 4);
    CHECK(choose_board(target, 25).find("0 to 24") != std::string::npos);
    CHECK(target.board == 4);
    TargetFile demo = target_of(demo_json());
    CHECK(choose_board(demo, 0).find("no population") != std::string::npos);
}

TEST_CASE("mistakes in a population are named with their places") {
    auto json = demo_json();
    json["population"] = {{"boards", 0}, {"lanes", 8}, {"length_mm", {600, 200}}, {"colour", 1}};
    Complaints complaints;
    CHECK_FALSE(parse_target(json.dump(), "target.json", complaints));
    const std::string text = complaints.text();
    for (const char* place : {"/population/boards", "/population/length_mm", "/population/colour",
                              "both lanes and population"})
        CHECK(text.find(place) != std::string::npos);
}
