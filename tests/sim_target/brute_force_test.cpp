// The quick way to the best codes against every code, on twenty lanes of the populations: some
// minutes on two processors.

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>

#include "sim_target/physics/truth.hpp"
#include "sim_target/target_file.hpp"

using namespace lanewright;
using namespace lanewright::sim;

TEST_CASE("screening agrees with every code within a thousandth on twenty lanes") {
    int lanes = 0;
    for (const std::string name : {"population", "population_hard"}) {
        Complaints complaints;
        const auto target =
            load_target(LANEWRIGHT_SOURCE_DIR "/configs/targets/" + name + ".json", complaints);
        REQUIRE(target);
        for (const int lane : {0, 1, 2, 3, 4, 5, 6, 7, 8, 9}) {
            const TargetFile board = population_board(*target, 10 + lane);
            const Oracle oracle(board, lane % 8);
            const auto all = all_codes(oracle, target->required, 2);
            const double best = std::max_element(all.begin(), all.end(), [](auto& a, auto& b) {
                                    return a.score < b.score;
                                })->score;
            const double quick = best_codes(oracle, target->required, 2).score;
            INFO(name << ", board " << board.board << ", lane " << lane % 8);
            CHECK(quick <= best);
            CHECK(quick >= best - 1e-3 * std::abs(best));
            ++lanes;
        }
    }
    CHECK(lanes == 20);
}
