#include "adapt/search/ladder.hpp"

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <set>

#include "adapt/search/response.hpp"
#include "tests/adapt/bench_of_one.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

std::unique_ptr<Procedure> ladder_on(const LaneProblem& problem) {
    return find_strategy("ladder")->make(problem, {}, {1, 0, 0, 0});
}

// The opening depends on the peaking alone, best at `wanted_db`, and is closed 4 dB away.
Truth by_peaking(const CodeSpace& space, const Codes& codes, double wanted_db) {
    const double away = std::abs(response_of(space, codes)->peaking_db - wanted_db) / 4.0;
    return {100 * (1 - away), 100 * (1 - away), 0.4 * (1 - away), 0.4 * (1 - away), true};
}

}  // namespace

TEST_CASE("the ladder climbs in peaking by even steps, over all that the banks can make") {
    const auto space = equalizer_space();
    const auto rungs = peaking_ladder(space, 25e9);
    REQUIRE(rungs.size() == ladder_rungs);
    CHECK(std::set<Codes>(rungs.begin(), rungs.end()).size() == rungs.size());
    double most = 0;
    for (std::uint64_t i = 0; i < space.size(); ++i) {
        most = std::max(most, response_of(space, space.at(i))->peaking_db);
    }
    const double step_db = most / static_cast<double>(ladder_rungs - 1);
    for (std::size_t i = 0; i < rungs.size(); ++i) {
        REQUIRE(space.allows(rungs[i]));
        const double peaking_db = response_of(space, rungs[i])->peaking_db;
        CHECK(peaking_db == Approx(static_cast<double>(i) * step_db).margin(0.5 * step_db));
        if (i > 0) CHECK(peaking_db > response_of(space, rungs[i - 1])->peaking_db);
    }
}

TEST_CASE("rungs keep clear of forbidden combinations") {
    const std::vector<Forbidden> forbidden = {{{{2, 8, 15}}, "large series capacitors"}};
    const auto space = equalizer_space(forbidden);
    for (const Codes& rung : peaking_ladder(space, 25e9)) CHECK(rung.value[2] < 8);
}

TEST_CASE("the ladder finds the peaking a lane needs within a dozen readings") {
    const auto space = equalizer_space();
    for (const double wanted_db : {3.0, 7.0, 11.0}) {
        INFO(wanted_db);
        BenchOfOne bench;
        bench.truth = [&](const Codes& codes) { return by_peaking(space, codes, wanted_db); };
        const auto problem = problem_on(space, {{0, 0, 0, 0}}, 24);
        const auto outcome = run(*ladder_on(problem), problem, bench, 24);
        CHECK(outcome.asked.size() <= 24);
        const auto first_good =
            std::find_if(outcome.asked.begin(), outcome.asked.end(),
                         [&](const Codes& codes) { return bench.truth(codes).up_mv > 85; });
        CHECK(first_good - outcome.asked.begin() < 12);
        CHECK(bench.truth(outcome.decision.codes).up_mv > 90);
    }
}

TEST_CASE("a ladder without element tables says so and still searches") {
    const auto space = plain_space({32, 16, 16, 8});
    CHECK(peaking_ladder(space, 25e9).empty());
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) {
        return cone(space, codes, {{20, 9, 5, 3}}, 100, 0.6, 1.0);
    };
    const auto problem = problem_on(space, {{0, 0, 0, 0}}, 60);
    const auto outcome = run(*ladder_on(problem), problem, bench, 60);
    CHECK(bench.truth(outcome.decision.codes).up_mv > bench.truth(problem.present).up_mv);
    const auto& notes = outcome.decision.notes;
    CHECK(std::any_of(notes.begin(), notes.end(), [](const std::string& note) {
        return note.find("element tables") != std::string::npos;
    }));
}
