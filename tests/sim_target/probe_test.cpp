#include <catch2/catch.hpp>
#include <cmath>

#include "sim_target/physics/truth.hpp"
#include "tests/sim_target/physics_support.hpp"

using namespace lanewright::sim;

namespace {

const std::vector<int> some_codes = {4, 4, 5, 0};

}  // namespace

TEST_CASE("a probe of codes answers as the oracle does") {
    const TargetFile target = target_of(small_json());
    const Oracle oracle(target, 3);
    const auto probe = oracle.probe(some_codes);
    const Margins told = oracle.margins(some_codes, 1e-6);
    const Margins probed = probe->margins(1e-6, {});
    REQUIRE_FALSE(told.closed);
    CHECK(probed.up_mv == told.up_mv);
    CHECK(probed.left_ui == told.left_ui);
    for (const double phase : {-0.3, 0.0, 0.2})
        for (const double offset : {-30.0, 0.0, 25.0})
            CHECK(probe->error_ratio(phase, offset, {}) ==
                  oracle.error_ratio_at(some_codes, phase, offset));
    CHECK(probe->crossing_spread_ui() > 0.02);
    CHECK(probe->crossing_spread_ui() < 0.7);
}

TEST_CASE("a probe asked in any order gives the same answers") {
    const TargetFile target = target_of(small_json());
    const Oracle oracle(target, 4);
    const auto first = oracle.probe(some_codes), second = oracle.probe(some_codes);
    const double before = first->error_ratio(0.1, 10, {});
    for (int i = 0; i < 20; ++i) second->error_ratio(0.01 * i, 5, {});
    second->margins(1e-4, {0.02, 1, 0.99});
    CHECK(second->error_ratio(0.1, 10, {}) == before);
}

TEST_CASE("a moment moves phase and threshold, and scales the heights") {
    const TargetFile target = target_of(small_json());
    const Oracle oracle(target, 2);
    const auto probe = oracle.probe(some_codes);
    const Margins still = probe->margins(1e-6, {});
    const Margins moved = probe->margins(1e-6, {0.05, 0, 1});
    CHECK(moved.left_ui == Approx(still.left_ui + 0.05).margin(1e-4));
    CHECK(moved.right_ui == Approx(still.right_ui - 0.05).margin(1e-4));
    const Margins shifted = probe->margins(1e-6, {0, 4, 1});
    CHECK(shifted.up_mv == Approx(still.up_mv - 4).margin(1e-3));
    CHECK(shifted.down_mv == Approx(still.down_mv + 4).margin(1e-3));
    const Margins larger = probe->margins(1e-6, {0, 0, 1.1});
    CHECK(larger.height_mv() == Approx(1.1 * still.height_mv()).epsilon(1e-6));
    CHECK(probe->error_ratio(0.1, 20, {0.03, 2, 1}) == Approx(probe->error_ratio(0.13, 22, {})));
}

TEST_CASE("disagreement lies between the difference and the sum of two error ratios") {
    const TargetFile target = target_of(small_json());
    const Oracle oracle(target, 7);
    for (const std::vector<int>& codes : {some_codes, std::vector<int>{0, 0, 0, 0}}) {
        const auto probe = oracle.probe(codes);
        const double data = probe->error_ratio(0, 0, {});
        for (const double phase : {-0.4, -0.1, 0.0, 0.3}) {
            for (const double offset : {-60.0, 0.0, 10.0, 200.0}) {
                const double here = probe->error_ratio(phase, offset, {});
                const double differ = probe->disagreement(phase, offset, {});
                CHECK(differ <= here + data);
                CHECK(differ >= std::abs(here - data) * (1 - 1e-9));
            }
        }
        CHECK(probe->disagreement(0, 0, {}) <= 2 * data);
    }
    // Far off, one kind of symbols is always wrong: half of the bits.
    CHECK(oracle.probe(some_codes)->disagreement(0, 5000, {}) == Approx(0.5).margin(0.01));
}
