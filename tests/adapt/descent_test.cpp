#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>

#include "adapt/search/descent.hpp"
#include "adapt/search/response.hpp"
#include "adapt/search/score.hpp"
#include "adapt/stats/random.hpp"
#include "tests/adapt/bench_of_one.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

double true_score(const Truth& truth, const Required& required) {
    return std::min(2 * std::min(truth.up_mv, truth.down_mv) / required.height_mv,
                    2 * std::min(truth.left_ui, truth.right_ui) / required.width_ui);
}

Codes brute_force(const CodeSpace& space, const BenchOfOne& bench, const Required& required) {
    Codes best;
    double best_score = -1e9;
    for (std::uint64_t index = 0; index < space.size(); ++index) {
        const Codes codes = space.at(index);
        if (!space.allows(codes)) continue;
        const double score = true_score(bench.truth(codes), required);
        if (score > best_score) {
            best_score = score;
            best = codes;
        }
    }
    return best;
}

Outcome run_strategy(std::string_view name, const LaneProblem& problem, BenchOfOne& bench) {
    const auto* entry = find_strategy(name);
    REQUIRE(entry != nullptr);
    auto procedure = entry->make(problem, {}, {1, 0, 0, 0});
    return run(*procedure, problem, bench);
}

// An eye that wants a certain peaking and zero, and loses height with attenuation and off them.
Truth wanted_response(const CodeSpace& space, const Codes& codes, double peaking_db,
                      double zero_ghz, double tolerance_db) {
    const auto response = response_of(space, codes).value();
    const double off =
        std::hypot((response.peaking_db - peaking_db) / tolerance_db,
                   20 * std::log10(response.zero_ghz / zero_ghz) / (2 * tolerance_db));
    const double height = 160 * std::pow(10, response.hf_db / 20) * (1 - off);
    const double width = 0.7 * (1 - off);
    return {height / 2, height / 2 - 1, width / 2, width / 2 - 0.01, true};
}

}  // namespace

TEST_CASE("descent finds what brute force finds where there is one peak") {
    const auto space = equalizer_space();
    for (const auto& best : {Codes{{9, 12, 3, 1}}, Codes{{31, 0, 15, 7}}, Codes{{0, 5, 8, 3}}}) {
        BenchOfOne bench;
        bench.quantised = false;
        bench.truth = [&](const Codes& codes) { return cone(space, codes, best, 100, 0.6, 0.2); };
        const auto problem = problem_on(space, {{16, 8, 8, 4}});
        const auto outcome = run_strategy("descent", problem, bench);
        CHECK(outcome.decision.codes == brute_force(space, bench, problem.required));
        CHECK(outcome.decision.codes == best);
        CHECK(outcome.asked.size() < 90);
    }
}

TEST_CASE("descent ends on the near one of two peaks and brute force on the high one") {
    const auto space = plain_space({33});
    BenchOfOne bench;
    bench.quantised = false;
    bench.truth = [](const Codes& codes) {
        const double near = 60 - 4 * std::abs(codes.value[0] - 6);
        const double high = 100 - 8 * std::abs(codes.value[0] - 26);
        const double half = std::max(near, high) / 2;
        return Truth{half, half, 0.4, 0.4, true};
    };
    const auto problem = problem_on(space, {{4}});
    CHECK(run_strategy("descent", problem, bench).decision.codes == Codes{{6}});
    CHECK(run_strategy("exhaustive", problem, bench).decision.codes == Codes{{26}});
    CHECK(brute_force(space, bench, problem.required) == Codes{{26}});
}

// Rosenbrock, Computer J. 3, 175-184, 1960 (value from memory): 100 (y - x^2)^2 + (1 - x)^2, a
// curved valley in which steps along the axes alone come to a halt.
TEST_CASE("steps along the axes stall in a curved valley") {
    const auto valley = [](double x, double y) {
        return 100 * (y - x * x) * (y - x * x) + (1 - x) * (1 - x);
    };
    CHECK(valley(-1.2, 1) == Approx(24.2));
    CHECK(valley(0, 0) == 1);
    CHECK(valley(1, 1) == 0);

    const auto space = plain_space({61, 61});  // x from -1.5, y from -0.5, steps of 0.05
    const auto value_at = [&](const Codes& codes) {
        return valley(-1.5 + 0.05 * codes.value[0], -0.5 + 0.05 * codes.value[1]);
    };
    BenchOfOne bench;
    bench.quantised = false;
    bench.truth = [&](const Codes& codes) {
        const double half = 500 - value_at(codes) / 10;
        return Truth{half, half, 50, 50, true};
    };
    auto problem = problem_on(space, {{6, 30}});
    problem.allow_unchanged = false;
    const auto outcome = run_strategy("descent", problem, bench);
    const double reached = value_at(outcome.decision.codes);
    INFO("reached " << reached << " after " << outcome.asked.size());
    CHECK(reached < valley(-1.2, 1));
    CHECK(reached > 0.01);
    for (std::size_t axis = 0; axis < 2; ++axis) {
        for (int direction : {-1, +1}) {
            Codes neighbour = outcome.decision.codes;
            neighbour.value[axis] += direction;
            if (space.allows(neighbour)) CHECK(value_at(neighbour) >= reached);
        }
    }
    CHECK(value_at(brute_force(space, bench, problem.required)) < 1e-9);
}

TEST_CASE("a ridge between the axes is followed where single steps only lead down") {
    // Along the ridge both codes rise together; every single step leaves it.
    const auto space = plain_space({33, 33});
    BenchOfOne bench;
    bench.quantised = false;
    bench.truth = [](const Codes& codes) {
        const double off = std::abs(codes.value[0] - codes.value[1]);
        const double along = std::abs(codes.value[0] + codes.value[1] - 50);
        const double half = 60 - 4 * off - along / 2;
        return Truth{half, half, 0.5, 0.5, true};
    };
    const auto problem = problem_on(space, {{16, 16}});
    const auto outcome = run_strategy("descent", problem, bench);
    CHECK(outcome.decision.codes == Codes{{25, 25}});
    CHECK(outcome.asked.size() < 120);
    // Each of the four codes beside the start is worse than it.
    for (const auto& beside :
         {Codes{{15, 16}}, Codes{{17, 16}}, Codes{{16, 15}}, Codes{{16, 17}}}) {
        CHECK(bench.truth(beside).up_mv < bench.truth(problem.present).up_mv);
    }
}

TEST_CASE("a budget that only cuts the steps beyond the local optimum is not reported as short") {
    const auto space = plain_space({33, 33});
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) { return cone(space, codes, {{20, 9}}, 100, 0.6, 0.3); };
    const auto through = run_strategy("descent", problem_on(space, {{16, 16}}), bench);
    const auto searched = static_cast<double>(through.asked.size());
    const auto notes_with = [&](double readings) {
        const auto outcome =
            run_strategy("descent", problem_on(space, {{16, 16}}, readings), bench);
        return std::any_of(
            outcome.decision.notes.begin(), outcome.decision.notes.end(),
            [](const std::string& note) { return note.find("budget ended") != std::string::npos; });
    };
    CHECK(notes_with(14));
    CHECK_FALSE(notes_with(searched - 1));
}

TEST_CASE("descent reads no codes twice before its finalists") {
    const auto space = equalizer_space();
    BenchOfOne bench;
    bench.monitor.height_sigma_mv = 1;
    bench.truth = [&](const Codes& codes) { return wanted_response(space, codes, 9, 1.5, 8); };
    const auto problem = problem_on(space, {{16, 8, 8, 4}}, 60);
    for (const auto* name : {"descent", "descent_axes"}) {
        const auto* entry = find_strategy(name);
        auto procedure = entry->make(problem, {}, {1, 0, 0, 0});
        std::vector<Codes> searched;
        for (auto requests = procedure->propose({}); !requests.empty();
             requests = procedure->propose({})) {
            std::vector<Reading> readings;
            for (const auto& request : requests) {
                if (procedure->phase() != "finalists") searched.push_back(request.codes);
                readings.push_back(bench.read(request));
            }
            procedure->observe(readings);
        }
        std::sort(searched.begin(), searched.end());
        CHECK(std::adjacent_find(searched.begin(), searched.end()) == searched.end());
        CHECK(searched.size() > 20);
    }
}

TEST_CASE("sixty noisy readings come near the best of sixty-five thousand codes") {
    const auto space = equalizer_space();
    for (const auto* name : {"descent", "descent_axes"}) {
        double sum = 0, worst = 1;
        int lanes = 0;
        for (const double peaking_db : {4.0, 7.0, 10.0, 13.0}) {
            for (std::uint64_t seed = 1; seed <= 5; ++seed) {
                BenchOfOne bench;
                bench.seed = seed;
                bench.monitor.height_sigma_mv = 1;
                bench.monitor.width_sigma_ui = 0.006;
                bench.truth = [&](const Codes& codes) {
                    return wanted_response(space, codes, peaking_db, 1.5, 10);
                };
                auto problem = problem_on(space, {{16, 8, 8, 4}}, 60);
                problem.noise = {2, 1.0 / 64, 1, 0.006};
                const auto outcome = run_strategy(name, problem, bench);
                CHECK(outcome.asked.size() <= 60);
                const auto best = brute_force(space, bench, problem.required);
                const double share =
                    true_score(bench.truth(outcome.decision.codes), problem.required) /
                    true_score(bench.truth(best), problem.required);
                sum += share;
                worst = std::min(worst, share);
                ++lanes;
            }
        }
        INFO(name << ": mean " << sum / lanes << ", worst " << worst);
        CHECK(sum / lanes > 0.9);
        CHECK(worst > 0.7);
        CHECK(sum / lanes < 1.0 + 1e-12);
    }
}

TEST_CASE("response steps fall back to codes where tables are missing, and say so") {
    const auto space = plain_space({8, 8});
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) { return cone(space, codes, {{6, 1}}, 100, 0.6, 0.3); };
    const auto outcome = run_strategy("descent_axes", problem_on(space, {{3, 3}}), bench);
    CHECK(outcome.decision.codes == Codes{{6, 1}});
    REQUIRE_FALSE(outcome.decision.notes.empty());
    CHECK(outcome.decision.notes.front().find("raw codes") != std::string::npos);
}

TEST_CASE("both neighbours of a code are asked for in one batch") {
    const auto space = plain_space({32, 32});
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) { return cone(space, codes, {{20, 9}}, 100, 0.6, 0.3); };
    const auto outcome = run_strategy("descent", problem_on(space, {{16, 16}}), bench);
    CHECK(outcome.asked[0] == Codes{{16, 16}});
    CHECK(outcome.batches[0] == 1);
    CHECK(outcome.batches[1] == 2);
    CHECK(outcome.asked[1] == Codes{{24, 16}});
    CHECK(outcome.asked[2] == Codes{{8, 16}});
}
