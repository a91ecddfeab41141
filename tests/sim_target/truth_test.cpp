#include "sim_target/physics/truth.hpp"

#include <catch2/catch.hpp>
#include <cmath>
#include <thread>

#include "tests/sim_target/physics_support.hpp"

using namespace lanewright::sim;

namespace {

const CodesScore& best_of(const std::vector<CodesScore>& all) {
    return *std::max_element(all.begin(), all.end(),
                             [](const auto& a, const auto& b) { return a.score < b.score; });
}

bool same(const CodesScore& a, const CodesScore& b) {
    return a.codes == b.codes && a.score == b.score && a.margins.up_mv == b.margins.up_mv &&
           a.margins.down_mv == b.margins.down_mv && a.margins.left_ui == b.margins.left_ui &&
           a.margins.right_ui == b.margins.right_ui && a.margins.closed == b.margins.closed &&
           a.margins.centre_error_ratio == b.margins.centre_error_ratio;
}

}  // namespace

TEST_CASE("a sweep over all codes is the same on one and on two threads") {
    const TargetFile target = target_of(small_json());
    const Oracle oracle(target, 6);
    const auto one = all_codes(oracle, target.required, 1);
    const auto two = all_codes(oracle, target.required, 2);
    REQUIRE(one.size() == oracle.combinations());
    REQUIRE(one.size() == 1024);
    REQUIRE(two.size() == one.size());
    std::size_t differing = 0;
    for (std::size_t i = 0; i < one.size(); ++i) differing += same(one[i], two[i]) ? 0 : 1;
    CHECK(differing == 0);
    CHECK(same(best_codes(oracle, target.required, 1, 0.1),
               best_codes(oracle, target.required, 2, 0.1)));
}

TEST_CASE("screening finds the best codes of a full sweep within a thousandth") {
    const TargetFile target = target_of(small_json());
    for (const int lane : {2, 7}) {
        const Oracle oracle(target, lane);
        const auto all = all_codes(oracle, target.required, 2);
        const double brute = best_of(all).score;
        const double screened = best_codes(oracle, target.required, 2, 0.05).score;
        INFO("lane " << lane);
        CHECK(screened <= brute);
        CHECK(screened >= brute - 1e-3 * std::abs(brute));
    }
}

TEST_CASE("an oracle asked in any order and from two threads gives the same margins") {
    const TargetFile target = target_of(small_json());
    const Oracle first(target, 3), second(target, 5);
    const std::vector<int> codes = {3, 4, 5, 0};
    const double alone = first.margins(codes, 1e-6).up_mv;
    second.margins({0, 0, 0, 0}, 1e-6);
    first.margins({7, 7, 7, 1}, 1e-9);
    CHECK(first.margins(codes, 1e-6).up_mv == alone);
    std::vector<double> seen(2);
    {
        std::jthread a([&] { seen[0] = first.margins(codes, 1e-6).up_mv; });
        std::jthread b([&] { seen[1] = first.margins(codes, 1e-6).up_mv; });
    }
    CHECK(seen[0] == alone);
    CHECK(seen[1] == alone);
}

TEST_CASE("the demo's lanes lose 3 to 16 dB and some start with a closed eye") {
    const TargetFile target = target_of(demo_json());
    REQUIRE(target.lanes.size() == 8);
    int closed = 0;
    double before_db = 0;
    for (int lane = 0; lane < 8; ++lane) {
        const Oracle oracle(target, lane);
        CHECK(oracle.combinations() == 65536);
        const double loss_db = oracle.nyquist_loss_db();
        CHECK(loss_db > before_db);
        CHECK(loss_db > 2.9);
        CHECK(loss_db < 16.1);
        before_db = loss_db;
        closed += oracle.margins(target.reset_codes, target.required.error_ratio).closed ? 1 : 0;
    }
    CHECK(closed >= 2);
    CHECK(closed <= 5);
}

TEST_CASE("the longest lane of the demo can be opened by ten steps of the monitor and more") {
    const TargetFile target = target_of(demo_json());
    const Oracle oracle(target, 7);
    const CodesScore best = best_codes(oracle, target.required, 2);
    CHECK(best.margins.height_mv() >= 10 * target.monitor.height_step_mv);
    CHECK(best.score > 1.0);
    CHECK(best.score < 3.0);
}

TEST_CASE("codes outside their banks and impossible ratios are refused") {
    const TargetFile target = target_of(small_json());
    const Oracle oracle(target, 0);
    CHECK_THROWS_AS(oracle.margins({8, 0, 0, 0}, 1e-6), std::out_of_range);
    CHECK_THROWS_AS(oracle.margins({0, 0, 0}, 1e-6), std::out_of_range);
    CHECK_THROWS_AS(oracle.margins({0, 0, 0, 0}, 0.0), std::invalid_argument);
    CHECK_THROWS_AS(oracle.margins({0, 0, 0, 0}, std::nan("")), std::invalid_argument);
    CHECK_THROWS_AS(oracle.margins({0, 0, 0, 0}, 0.4), std::invalid_argument);
    CHECK_THROWS_AS(all_codes(oracle, {10, 0.1, 0.0}, 2), std::invalid_argument);
    CHECK_THROWS_AS(best_codes(oracle, {10, 0.1, 1.0}, 2), std::invalid_argument);
    CHECK_THROWS_AS(Oracle(target, 8), std::out_of_range);
    CHECK_THROWS_AS(Oracle(target, -1), std::out_of_range);
}

TEST_CASE("codes are counted with the last dimension moving fastest") {
    const TargetFile target = target_of(demo_json());
    const Oracle oracle(target, 0);
    CHECK(oracle.code_counts() == std::vector<int>{32, 16, 16, 8});
    CHECK(oracle.codes_at(0) == std::vector<int>{0, 0, 0, 0});
    CHECK(oracle.codes_at(9) == std::vector<int>{0, 0, 1, 1});
    CHECK(oracle.codes_at(65535) == std::vector<int>{31, 15, 15, 7});
}

TEST_CASE("a lower error ratio never widens an eye") {
    const TargetFile target = target_of(small_json());
    const Oracle oracle(target, 4);
    const std::vector<int> codes = {4, 4, 5, 0};
    Margins before = oracle.margins(codes, 1e-2);
    for (const double ratio : {1e-4, 1e-6, 1e-9, 1e-12, 1e-15}) {
        const Margins now = oracle.margins(codes, ratio);
        CHECK(now.up_mv < before.up_mv);
        CHECK(now.down_mv < before.down_mv);
        CHECK(now.left_ui < before.left_ui);
        CHECK(now.right_ui < before.right_ui);
        before = now;
    }
}
