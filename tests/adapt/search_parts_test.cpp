#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <set>

#include "adapt/search/closed_scan.hpp"
#include "adapt/search/exhaustive.hpp"
#include "adapt/search/ledger.hpp"
#include "adapt/search/merit.hpp"
#include "adapt/search/moves.hpp"
#include "adapt/search/response.hpp"
#include "adapt/search/text.hpp"
#include "tests/adapt/bench_of_one.hpp"

using namespace lanewright;
using namespace lanewright::tests;

TEST_CASE("a request costs settling, looks and dwell as declared") {
    const CostModel cost{0.002, 0.001, 4, 10e9};
    const Request margin{{{1}}, {}, MarginWanted{1e-6, 100'000'000}, ""};
    CHECK(cost_s(cost, margin) == Approx(0.002 + 4 * (0.001 + 0.01)));
    CHECK(standard_readings(cost, margin) == 1);
    const Request looks{{{1}}, {}, LooksWanted{{{0, 0, 500'000'000}, {0.1, 2, 2'500'000'000}}}, ""};
    CHECK(cost_s(cost, looks) == Approx(0.002 + 2 * 0.001 + 0.3));
    CHECK(standard_readings(cost, looks) == Approx(3));
    CHECK(standard_readings(cost, {{{1}}, {}, LooksWanted{std::vector<Look>(40)}, ""}) ==
          Approx(2.5));
    CHECK(cost_s({}, margin) == 0);
    CHECK(standard_readings({}, margin) == 1);
}

TEST_CASE("numbers in sentences look the same in every locale") {
    CHECK(fixed(1.2345, 2) == "1.23");
    CHECK(fixed(-1e300, 0).size() == 302);
    CHECK(general(1e-6, 3) == "1e-06");
    CHECK(fixed(INFINITY, 3) == "inf");
    CHECK(text_of(equalizer_space(), {{9, 15, 15, 0}}) == "r1=9 r2=15 c1=15 c2=0");
}

TEST_CASE("merit puts lock before opening before score before roundness") {
    const auto space = plain_space({4});
    const auto problem = problem_on(space, {{0}});
    const auto merit = [&](Truth truth) {
        BenchOfOne bench;
        bench.truth = [truth](const Codes&) { return truth; };
        return merit_of(bench.read({{{0}}, {}, problem.reading, ""}), problem.required);
    };
    const auto lost = merit({50, 50, 0.3, 0.3, false});
    const auto shut = merit({0, 0, 0, 0, true});
    const auto half_shut = merit({0, 30, 0.2, 0.2, true});
    const auto small = merit({10, 10, 0.3, 0.3, true});
    const auto rounder = merit({10, 30, 0.3, 0.3, true});
    const auto large = merit({30, 30, 0.3, 0.3, true});
    CHECK(lost < shut);
    CHECK(shut < half_shut);
    CHECK(half_shut < small);
    CHECK(small < rounder);
    CHECK(rounder < large);
    CHECK(shut.roundness == 0);
    CHECK(half_shut.score == 0);
}

TEST_CASE("the ledger charges, ranks and remembers what came back instead") {
    const auto space = plain_space({8, 8});
    auto problem = problem_on(space, {{1, 1}}, 4);
    Ledger ledger(problem);
    CHECK(ledger.affordable() == 4);
    BenchOfOne bench;
    bench.truth = [](const Codes& codes) {
        return Truth{20.0 + 4 * codes.value[0], 20.0 + 4 * codes.value[0], 0.3, 0.3, true};
    };
    const auto read = [&](Codes asked, Codes got) {
        auto reading = bench.read({got, {}, problem.reading, ""});
        reading.cost_s = 0.25;
        ledger.add(asked, reading);
    };
    read({{1, 1}}, {{1, 1}});
    read({{2, 1}}, {{3, 1}});
    read({{3, 7}}, {{3, 7}});
    CHECK(ledger.was_read({{2, 1}}));
    CHECK(ledger.find({{2, 1}}) == ledger.find({{3, 1}}));
    CHECK(ledger.asked_differently() == 1);
    CHECK(ledger.entries().size() == 3);
    // Equal merits: the one with fewer codes changed from the present first.
    CHECK(ledger.ranking() == std::vector<Codes>{{{3, 1}}, {{3, 7}}, {{1, 1}}});
    CHECK(ledger.affordable() == 1);
    CHECK(ledger.bench_s() == 0.75);
    Reading nothing;
    nothing.codes = {{4, 4}};
    ledger.add({{4, 4}}, nothing);
    CHECK(ledger.reading_count() == 3);
    problem.budget.bench_s = 0.76;
    CHECK(ledger.affordable() ==
          std::min<std::size_t>(1, static_cast<std::size_t>(
                                       0.01 / cost_s(problem.cost, ledger.request({}, {}, "")))));
}

TEST_CASE("a closed scan spreads over the space without repeats or forbidden codes") {
    const Forbidden rule{{{0, 16, 31}, {1, 8, 15}}, "test"};
    const auto space = equalizer_space({rule});
    const Codes present{{0, 0, 0, 0}};
    const auto scan = closed_scan(space, present, 60);
    CHECK(scan.size() == 60);
    CHECK(scan == closed_scan(space, present, 60));
    std::set<Codes> seen(scan.begin(), scan.end());
    CHECK(seen.size() == 60);
    CHECK(seen.count(present) == 0);
    std::set<std::int32_t> quarters;
    for (const auto& codes : scan) {
        CHECK(space.allows(codes));
        CHECK(response_of(space, codes)->peaking_db > 0);
        quarters.insert(codes.value[2] / 4);
    }
    CHECK(quarters.size() == 4);
}

TEST_CASE("a closed scan of a small space lists all of it") {
    const auto space = plain_space({3, 3});
    CHECK(closed_scan(space, {{1, 1}}, 100).size() == 8);
    CHECK(closed_scan(space, {{1, 1}}, 5).size() == 5);
    CHECK(closed_scan(CodeSpace(), {}, 5).empty());
    // All but one code forbidden, which the sequence would miss.
    const auto strict = plain_space({64, 64}, {{{{0, 0, 62}}, ""}, {{{1, 0, 62}}, ""}});
    CHECK(closed_scan(strict, {{0, 0}}, 4) == std::vector<Codes>{{{63, 63}}});
}

TEST_CASE("the nearest allowed codes are found from outside the ranges and from forbidden ones") {
    const auto space = plain_space({8, 8}, {{{{0, 0, 3}}, ""}});
    CHECK(nearest_allowed(space, {{5, 5}}) == Codes{{5, 5}});
    CHECK(nearest_allowed(space, {{2, 5}}) == Codes{{4, 5}});
    CHECK(nearest_allowed(space, {{99, -7}}) == Codes{{7, 0}});
    CHECK(nearest_allowed(plain_space({2}, {{{{0, 0, 1}}, ""}}), {{0}}).value.empty());
}

TEST_CASE("steps along codes halve from a quarter of the range and end at its ends") {
    const auto space = plain_space({32, 4, 1}, {{{{0, 18, 20}}, ""}});
    const auto moves = make_code_moves(space);
    CHECK(moves->axes() == 2);  // one code gives no direction
    CHECK(moves->levels() == 4);
    CHECK(moves->step({{8, 0, 0}}, 0, +1, 0) == Codes{{16, 0, 0}});
    CHECK(moves->step({{8, 0, 0}}, 0, +1, 3) == Codes{{9, 0, 0}});
    CHECK(moves->step({{3, 0, 0}}, 0, -1, 0) == Codes{{0, 0, 0}});
    CHECK_FALSE(moves->step({{0, 0, 0}}, 0, -1, 0));
    CHECK(moves->step({{12, 0, 0}}, 0, +1, 0) == Codes{{17, 0, 0}});  // short of what is forbidden
    CHECK_FALSE(moves->step({{17, 0, 0}}, 0, +1, 2));
    CHECK(moves->step({{8, 3, 0}}, 1, -1, 9) == Codes{{8, 2, 0}});
}

TEST_CASE("steps along the response move their own axis most") {
    const auto space = equalizer_space();
    const auto moves = make_response_moves(space);
    REQUIRE(moves);
    CHECK(moves->axes() == 4);
    const Codes from{{16, 8, 8, 3}};
    const auto here = response_of(space, from).value();
    for (std::size_t axis = 0; axis < 4; ++axis) {
        for (int direction : {-1, +1}) {
            const auto codes = moves->step(from, axis, direction, 1);
            INFO(moves->axis_name(axis) << " " << direction);
            REQUIRE(codes);
            const auto there = response_of(space, *codes).value();
            const double change[] = {there.dc_db - here.dc_db, there.hf_db - here.hf_db,
                                     20 * std::log10(there.zero_ghz / here.zero_ghz),
                                     20 * std::log10(there.level_ohm / here.level_ohm)};
            CHECK(change[axis] * direction > 0);
            // Banks hold few codes; still the attenuations stay put while another axis moves.
            for (std::size_t other : {std::size_t{0}, std::size_t{1}}) {
                if (other != axis) CHECK(std::abs(change[other]) < 1.0);
            }
        }
    }
}

TEST_CASE("there are no response steps without tables") {
    CHECK_FALSE(make_response_moves(plain_space({4, 4, 4, 4})));
    auto dimensions = equalizer_space().dimensions();
    dimensions[2].nominal.pop_back();
    CHECK_FALSE(make_response_moves(CodeSpace(dimensions, {})));
    dimensions.erase(dimensions.begin() + 2);
    CHECK_FALSE(make_response_moves(CodeSpace(dimensions, {})));
}

TEST_CASE("a grid takes every stride-th code and is thinned to what the budget holds") {
    const auto space = plain_space({8, 5});
    const auto whole = make_grid(space, 1, 1000);
    CHECK(whole.size() == 40);
    CHECK_FALSE(whole.thinned);
    CHECK(whole.at(39) == Codes{{7, 4}});
    const auto strided = make_grid(space, 3, 1000);
    CHECK(strided.codes[0] == std::vector<std::int32_t>{0, 3, 6});
    CHECK(strided.codes[1] == std::vector<std::int32_t>{0, 3});
    const auto thin = make_grid(space, 1, 12);
    CHECK(thin.thinned);
    CHECK(thin.size() <= 12);
    CHECK(thin.size() >= 9);
    CHECK(thin.codes[0] == std::vector<std::int32_t>{1, 4, 6});
    CHECK(make_grid(space, 0, 0).size() == 1);
    CHECK(make_grid(CodeSpace(), 1, 10).size() == 0);
}

TEST_CASE("pair steps move two codes at once, inside the range and past forbidden combinations") {
    const auto space = plain_space({9, 1, 17}, {{{{0, 5, 5}, {2, 9, 9}}, "unstable"}});
    const auto moves = make_pair_moves(space);
    REQUIRE(moves->axes() == 2);  // the one-code dimension takes no part
    CHECK(moves->axis_name(0) == "a against c");
    CHECK(moves->axis_name(1) == "a and c");
    const auto last = moves->levels() - 1;
    const Codes middle{{4, 0, 8}};
    CHECK(moves->step(middle, 0, +1, last) == Codes{{5, 0, 7}});
    CHECK(moves->step(middle, 0, -1, last) == Codes{{3, 0, 9}});
    CHECK(moves->step(middle, 1, -1, last) == Codes{{3, 0, 7}});
    CHECK(moves->step(middle, 1, +1, last) == std::nullopt);            // forbidden
    CHECK(moves->step(Codes{{8, 0, 8}}, 1, +1, last) == std::nullopt);  // no code above
    CHECK(moves->step(middle, 1, +1, 0) == Codes{{6, 0, 12}});
}
