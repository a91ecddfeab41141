#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>

#include "adapt/search/finalists.hpp"
#include "adapt/search/ledger.hpp"
#include "tests/adapt/bench_of_one.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

std::unique_ptr<Procedure> make(const StrategyEntry& entry, const LaneProblem& problem) {
    return entry.make(problem, {}, {1, 0, 0, 0});
}

bool mentions(const Decision& decision, std::string_view words) {
    return std::any_of(decision.notes.begin(), decision.notes.end(), [&](const std::string& note) {
        return note.find(words) != std::string::npos;
    });
}

// Open only near a corner of the equalizer's space: about one code in thirty.
Truth hidden(const CodeSpace& space, const Codes& codes) {
    return cone(space, codes, {{6, 12, 13, 1}}, 120, 0.7, 1.25);
}

}  // namespace

TEST_CASE("the registry finds strategies by name and nothing else") {
    REQUIRE(strategies().size() == 4);
    for (const auto& entry : strategies()) {
        CHECK(find_strategy(entry.name) == &entry);
        CHECK_FALSE(entry.summary.empty());
    }
    CHECK(find_strategy("descend") == nullptr);
    CHECK(find_strategy("") == nullptr);
}

TEST_CASE("every strategy opens an eye that is closed at the start") {
    const auto space = equalizer_space();
    for (const auto& entry : strategies()) {
        INFO(entry.name);
        BenchOfOne bench;
        bench.truth = [&](const Codes& codes) { return hidden(space, codes); };
        const auto problem = problem_on(space, {{31, 0, 0, 7}}, 200);
        const auto outcome = run(*make(entry, problem), problem, bench, 200);
        CHECK(outcome.asked.front() == problem.present);
        CHECK_FALSE(outcome.decision.unchanged);
        CHECK(bench.truth(outcome.decision.codes).up_mv > 20);
        if (entry.name != "exhaustive") CHECK(mentions(outcome.decision, "closed at the start"));
    }
}

TEST_CASE("where nothing opens the present codes stay") {
    const auto space = equalizer_space();
    for (const auto& entry : strategies()) {
        for (const bool locked : {true, false}) {
            INFO(entry.name);
            BenchOfOne bench;
            bench.truth = [&](const Codes&) { return Truth{-5, -5, 0, 0, locked}; };
            const auto problem = problem_on(space, {{3, 3, 3, 3}}, 40);
            const auto outcome = run(*make(entry, problem), problem, bench, 40);
            CHECK(outcome.decision.unchanged);
            CHECK(outcome.decision.codes == problem.present);
            CHECK(outcome.decision.reason.find("open") != std::string::npos);
            CHECK(outcome.asked.size() >= 10);
        }
    }
}

TEST_CASE("a partly closed eye gives a slope that a scan without an opening hands on") {
    // Up opens only in one corner, while down shows the way.
    const auto space = plain_space({64, 64});
    BenchOfOne bench;
    bench.truth = [](const Codes& codes) {
        const double distance = std::abs(codes.value[0] - 61) + std::abs(codes.value[1] - 2);
        return Truth{distance < 3 ? 30 - 5 * distance : 0, 100 - distance / 2, 0.3, 0.3, true};
    };
    const auto problem = problem_on(space, {{5, 60}}, 80);
    const auto outcome = run(*make(*find_strategy("descent"), problem), problem, bench, 80);
    CHECK_FALSE(outcome.decision.unchanged);
    CHECK(bench.truth(outcome.decision.codes).up_mv > 0);
}

TEST_CASE("no strategy leaves its budget in readings or in bench time") {
    const auto space = equalizer_space();
    for (const auto& entry : strategies()) {
        for (const double readings : {1.0, 2.0, 3.0, 5.0, 8.0, 20.0, 61.0}) {
            INFO(entry.name << " " << readings);
            BenchOfOne bench;
            bench.truth = [&](const Codes& codes) { return hidden(space, codes); };
            auto problem = problem_on(space, {{6, 10, 12, 2}}, readings);
            const auto counted = run(*make(entry, problem), problem, bench);
            CHECK(static_cast<double>(counted.asked.size()) <= readings);
            CHECK(counted.decision.standard_readings <= readings);
            CHECK(space.allows(counted.decision.codes));
            CHECK_FALSE(counted.decision.reason.empty());

            const double each_s = cost_s(problem.cost, Request{{}, {}, problem.reading, ""});
            problem.budget = {0, each_s * readings};
            BenchOfOne timed_bench = bench;
            const auto timed = run(*make(entry, problem), problem, timed_bench);
            CHECK(timed.decision.bench_s <= problem.budget.bench_s * (1 + 1e-9));
            CHECK(timed.asked.size() == counted.asked.size());
        }
    }
}

TEST_CASE("a budget of one reading still concludes with the present codes") {
    const auto space = equalizer_space();
    for (const auto& entry : strategies()) {
        BenchOfOne bench;
        bench.truth = [&](const Codes& codes) { return hidden(space, codes); };
        const auto problem = problem_on(space, {{6, 12, 13, 2}}, 1);
        const auto outcome = run(*make(entry, problem), problem, bench, 1);
        CHECK(outcome.asked == std::vector<Codes>{problem.present});
        CHECK(outcome.decision.unchanged);
        CHECK(outcome.decision.reading_count == 1);
        CHECK(mentions(outcome.decision, "budget"));
    }
}

TEST_CASE("concluding before any reading keeps the present codes and says why") {
    const auto space = equalizer_space();
    const auto problem = problem_on(space, {{6, 12, 13, 2}}, 60);
    for (const auto& entry : strategies()) {
        const auto decision = make(entry, problem)->conclude();
        CHECK(decision.unchanged);
        CHECK(decision.codes == problem.present);
        CHECK(decision.reading_count == 0);
        CHECK(decision.reason.find("nothing was read") != std::string::npos);
    }
}

TEST_CASE("forbidden combinations are never proposed, even from a forbidden start") {
    const std::vector<Forbidden> rules = {{{{0, 0, 7}, {1, 8, 15}}, "too much current"},
                                          {{{2, 12, 15}, {3, 0, 1}}, "unstable"}};
    const auto space = equalizer_space(rules);
    for (const auto& entry : strategies()) {
        for (const auto& present : {Codes{{20, 8, 8, 4}}, Codes{{3, 12, 8, 4}}}) {
            BenchOfOne bench;
            bench.truth = [&](const Codes& codes) { return hidden(space, codes); };
            auto problem = problem_on(space, present, 120);
            const auto outcome = run(*make(entry, problem), problem, bench, 120);  // checks each
            CHECK(space.allows(outcome.decision.codes));
            if (!space.allows(present)) {
                CHECK(outcome.asked.front() != present);
                CHECK(mentions(outcome.decision, "outside the allowed codes"));
            }
        }
    }
}

TEST_CASE("a space with one allowed code, with none, or with one-code dimensions is no trouble") {
    for (const auto& entry : strategies()) {
        INFO(entry.name);
        BenchOfOne bench;
        bench.truth = [](const Codes&) { return Truth{30, 30, 0.3, 0.3, true}; };

        const auto single =
            plain_space({64, 64}, {{{{0, 0, 40}}, ""}, {{{0, 42, 63}}, ""}, {{{1, 0, 62}}, ""}});
        auto problem = problem_on(single, {{41, 63}}, 30);
        auto outcome = run(*make(entry, problem), problem, bench, 30);
        CHECK(outcome.asked == std::vector<Codes>{{{41, 63}}});
        CHECK(outcome.decision.unchanged);

        const auto none = plain_space({4}, {{{{0, 0, 3}}, ""}});
        problem = problem_on(none, {{1}}, 30);
        outcome = run(*make(entry, problem), problem, bench, 30);
        CHECK(outcome.asked.empty());
        CHECK(outcome.decision.unchanged);
        CHECK(mentions(outcome.decision, "no allowed codes"));

        const auto narrow = plain_space({1, 9, 1});
        problem = problem_on(narrow, {{0, 4, 0}}, 30);
        bench.truth = [&](const Codes& codes) {
            return cone(narrow, codes, {{0, 7, 0}}, 100, .6, .8);
        };
        outcome = run(*make(entry, problem), problem, bench, 30);
        CHECK(outcome.decision.codes == Codes{{0, 7, 0}});

        LaneProblem nowhere = problem;
        nowhere.space = nullptr;
        CHECK(make(entry, nowhere)->propose({}).empty());
        CHECK(make(entry, nowhere)->conclude().unchanged);
    }
}

TEST_CASE("the same history leads to the same proposals") {
    const auto space = equalizer_space();
    for (const auto& entry : strategies()) {
        BenchOfOne bench;
        bench.monitor.height_sigma_mv = 1.5;
        bench.truth = [&](const Codes& codes) { return hidden(space, codes); };
        const auto problem = problem_on(space, {{31, 0, 0, 7}}, 80);
        auto first = make(entry, problem);
        std::vector<std::vector<Reading>> history;
        std::vector<std::vector<Codes>> asked;
        for (auto requests = first->propose({}); !requests.empty(); requests = first->propose({})) {
            auto& batch = history.emplace_back();
            auto& codes = asked.emplace_back();
            for (const auto& request : requests) {
                codes.push_back(request.codes);
                batch.push_back(bench.read(request));
            }
            first->observe(batch);
        }
        // A second one, asked for conclusions in between, is handed the stored readings.
        auto second = make(entry, problem);
        for (std::size_t i = 0; i < history.size(); ++i) {
            const auto requests = second->propose({});
            REQUIRE(requests.size() == asked[i].size());
            for (std::size_t j = 0; j < requests.size(); ++j) {
                CHECK(requests[j].codes == asked[i][j]);
            }
            second->observe(history[i]);
            CHECK_FALSE(second->conclude().reason.empty());
        }
        CHECK(second->propose({}).empty());
        CHECK(second->conclude().codes == first->conclude().codes);
        CHECK(second->conclude().reason == first->conclude().reason);
    }
}

TEST_CASE("requests carry the condition that holds when they are proposed") {
    const auto space = equalizer_space();
    const auto problem = problem_on(space, {{1, 1, 1, 1}}, 10);
    auto procedure = make(strategies()[0], problem);
    CHECK(procedure->propose(Condition{3}).front().condition == Condition{3});
    CHECK(procedure->propose(Condition{4}).front().condition == Condition{4});
}

TEST_CASE("a board that answers with other codes is scored by what it has") {
    // The lowest bit of the first code is stuck at 0.
    const auto space = plain_space({16, 4});
    for (const auto& entry : strategies()) {
        BenchOfOne bench;
        bench.truth = [&](const Codes& codes) {
            return cone(space, codes, {{11, 2}}, 100, .6, .8);
        };
        const auto problem = problem_on(space, {{4, 1}}, 60);
        auto procedure = make(entry, problem);
        std::size_t count = 0;
        for (auto requests = procedure->propose({}); !requests.empty();
             requests = procedure->propose({})) {
            std::vector<Reading> readings;
            for (auto request : requests) {
                request.codes.value[0] &= ~1;
                readings.push_back(bench.read(request));
            }
            count += readings.size();
            REQUIRE(count <= 60);
            procedure->observe(readings);
        }
        const auto decision = procedure->conclude();
        CHECK(decision.codes.value[0] % 2 == 0);
        CHECK(mentions(decision, "read back"));
    }
}

TEST_CASE("present codes stay unless something is significantly better") {
    const auto space = plain_space({9, 9});
    BenchOfOne bench;
    bench.monitor.height_sigma_mv = 4;
    bench.monitor.width_sigma_ui = 0.02;
    int changed = 0;
    for (std::uint64_t seed = 1; seed <= 200; ++seed) {
        bench.seed = seed;
        bench.truth = [](const Codes&) { return Truth{25, 25, 0.2, 0.2, true}; };  // all alike
        auto problem = problem_on(space, {{4, 4}}, 40);
        problem.noise = {2, 1.0 / 64, 4, 0.02};
        changed += run(*make(*find_strategy("descent"), problem), problem, bench).decision.unchanged
                       ? 0
                       : 1;
    }
    // The best of three at a one-sided 5 % would be wrong about 10 times in 100.
    INFO("changed " << changed << " of 200");
    CHECK(changed < 30);

    auto problem = problem_on(space, {{4, 4}}, 40);
    problem.allow_unchanged = false;
    const auto outcome = run(*make(*find_strategy("descent"), problem), problem, bench);
    CHECK(outcome.decision.reason.find("best of what was read") != std::string::npos);
}

TEST_CASE("the decision rests on repeated readings of the finalists") {
    const auto space = plain_space({17, 17});
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) { return cone(space, codes, {{13, 3}}, 100, 0.6, 0.5); };
    const auto problem = problem_on(space, {{8, 8}}, 60);
    auto procedure = make(*find_strategy("descent"), problem);
    const auto outcome = run(*procedure, problem, bench);
    CHECK(procedure->phase() == "finished");
    CHECK(std::count(outcome.asked.begin(), outcome.asked.end(), outcome.decision.codes) == 4);
    CHECK(std::count(outcome.asked.begin(), outcome.asked.end(), problem.present) == 4);
    CHECK(outcome.decision.reason.find("3 readings each") != std::string::npos);
    CHECK(finalist_share(60) == 12);
    CHECK(finalist_share(7) == 0);
    CHECK(finalist_share(8) == 2);
}

TEST_CASE("a reason names closed eyes and open limits in words, never as infinities") {
    const auto space = plain_space({17, 17});
    auto problem = problem_on(space, {{1, 16}}, 60);
    const auto reason_on = [&](const Truth& present, const Truth& others) {
        BenchOfOne bench;
        bench.truth = [&](const Codes& codes) {
            return codes == problem.present ? present : others;
        };
        return run(*make(*find_strategy("descent"), problem), problem, bench).decision.reason;
    };
    const Truth open{30, 30, 0.3, 0.3, true}, closed{-5, -5, 0, 0, true},
        wide{900, 900, 2, 2, true};
    CHECK(reason_on(closed, open).find("against closed") != std::string::npos);
    CHECK(reason_on({0, 0, 0, 0, false}, open).find("against no lock") != std::string::npos);
    CHECK(reason_on(open, wide).find("at least") != std::string::npos);
    CHECK(reason_on(wide, open).find("present codes are the best") != std::string::npos);
    for (const auto& present : {open, closed, wide}) {
        for (const auto& others : {open, closed, wide}) {
            const std::string reason = reason_on(present, others);
            INFO(reason);
            CHECK(reason.find("inf") == std::string::npos);
            CHECK(reason.find("nan") == std::string::npos);
            CHECK(reason.size() < 160);
        }
    }
}

TEST_CASE("with the present codes closed a fourth set of codes takes their seat") {
    const auto space = plain_space({9});
    const auto problem = problem_on(space, {{0}}, 60);
    Ledger ledger(problem);
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) {
        return codes == problem.present ? Truth{-5, -5, 0, 0, true}
                                        : cone(space, codes, {{6}}, 100, 0.6, 0.5);
    };
    for (int code = 0; code < 9; ++code) {
        ledger.add({{code}}, bench.read({{{code}}, {}, problem.reading, ""}));
    }
    const auto batch = next_finalists(problem, ledger, 12);
    CHECK(batch.size() == 4);
    CHECK(std::count(batch.begin(), batch.end(), problem.present) == 0);
    CHECK(next_finalists(problem, ledger, 3).size() == 3);
}

TEST_CASE("finalists are read forwards and backwards in turn, so that drift cancels") {
    const auto space = plain_space({9});
    const auto problem = problem_on(space, {{4}});
    Ledger ledger(problem);
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) { return cone(space, codes, {{6}}, 100, 0.6, 0.5); };
    const auto read = [&](const Codes& codes) {
        ledger.add(codes, bench.read({codes, {}, problem.reading, ""}));
    };
    for (int code = 0; code < 9; ++code) read({{code}});
    std::vector<std::vector<Codes>> rounds;
    for (auto batch = next_finalists(problem, ledger, 12); !batch.empty();
         batch = next_finalists(problem, ledger, 12)) {
        for (const auto& codes : batch) read(codes);
        rounds.push_back(batch);
    }
    REQUIRE(rounds.size() == 3);
    CHECK(rounds[0].front() == Codes{{6}});
    CHECK(rounds[0].back() == problem.present);
    CHECK(rounds[1] == std::vector<Codes>(rounds[0].rbegin(), rounds[0].rend()));
    CHECK(rounds[2] == rounds[0]);
}

TEST_CASE("one lucky reading does not win against steady ones") {
    // One neighbour reads far too well the first time only.
    const auto space = plain_space({9});
    const auto problem = problem_on(space, {{4}}, 60);
    auto procedure = make(*find_strategy("descent"), problem);
    BenchOfOne bench;
    bench.truth = [](const Codes& codes) {
        const double half = 30.0 - 4 * std::abs(codes.value[0] - 5);
        return Truth{half, half, 0.3, 0.3, true};
    };
    bool lucky = true;
    for (auto requests = procedure->propose({}); !requests.empty();
         requests = procedure->propose({})) {
        std::vector<Reading> readings;
        for (const auto& request : requests) {
            readings.push_back(bench.read(request));
            if (request.codes == Codes{{2}} && lucky) {
                readings.back().up_mv->value = readings.back().down_mv->value = 80;
                lucky = false;
            }
        }
        procedure->observe(readings);
    }
    CHECK_FALSE(lucky);
    CHECK(procedure->conclude().codes != Codes{{2}});
}

TEST_CASE("eyes beyond the monitor's range are not told apart") {
    const auto space = plain_space({9, 9});
    BenchOfOne bench;
    bench.truth = [](const Codes&) { return Truth{900, 900, 2, 2, true}; };
    for (const auto& entry : strategies()) {
        const auto problem = problem_on(space, {{4, 4}}, 40);
        const auto outcome = run(*make(entry, problem), problem, bench);
        CHECK(outcome.decision.unchanged);
        CHECK(mentions(outcome.decision, "monitor's range"));
    }
}

TEST_CASE("codes at the end of their range are pointed out") {
    const auto space = plain_space({9, 9});
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) { return cone(space, codes, {{8, 0}}, 100, 0.6, 0.4); };
    const auto problem = problem_on(space, {{4, 4}}, 60);
    const auto outcome = run(*make(*find_strategy("descent"), problem), problem, bench);
    CHECK(mentions(outcome.decision, "a is at the upper end"));
    CHECK(mentions(outcome.decision, "b is at the lower end"));
}

TEST_CASE("exhaustive reads its whole grid, or thins it to the budget") {
    const auto space = plain_space({6, 5});
    BenchOfOne bench;
    bench.truth = [&](const Codes& codes) { return cone(space, codes, {{5, 1}}, 100, 0.6, 0.4); };
    auto problem = problem_on(space, {{2, 2}});
    const auto all = run(*make(*find_strategy("exhaustive"), problem), problem, bench);
    CHECK(all.asked.size() == 30 + 12);
    CHECK(all.decision.codes == Codes{{5, 1}});
    problem.stride = 2;
    const auto strided = run(*make(*find_strategy("exhaustive"), problem), problem, bench);
    CHECK(strided.asked.size() == 9 + 12);
    problem.budget.standard_readings = 20;
    problem.stride = 1;
    const auto thin = run(*make(*find_strategy("exhaustive"), problem), problem, bench);
    CHECK(thin.asked.size() <= 20);
    CHECK(mentions(thin.decision, "thinned"));
}

TEST_CASE("former and new codes are read in turn and a steady drift cancels") {
    const auto space = plain_space({9});
    const auto problem = problem_on(space, {{2}});
    auto procedure = make_fresh_comparison(problem, {{6}}, 2);
    std::vector<Codes> asked;
    double drift_mv = 0;
    double sum_former = 0, sum_new = 0;
    for (auto requests = procedure->propose({}); !requests.empty();
         requests = procedure->propose({})) {
        std::vector<Reading> readings;
        for (const auto& request : requests) {
            BenchOfOne bench;
            bench.quantised = false;
            bench.truth = [&](const Codes& codes) {
                const double half = (codes.value[0] == 6 ? 40 : 30) - drift_mv;
                return Truth{half, half, 0.4, 0.4, true};
            };
            readings.push_back(bench.read(request));
            (request.codes == Codes{{6}} ? sum_new : sum_former) += readings.back().up_mv->value;
            asked.push_back(request.codes);
            drift_mv += 1.5;
        }
        procedure->observe(readings);
    }
    const Codes a{{2}}, b{{6}};
    CHECK(asked == std::vector<Codes>{a, b, b, a, a, b, b, a});
    CHECK(sum_new / 4 - sum_former / 4 == Approx(10));
    const auto decision = procedure->conclude();
    CHECK(decision.codes == b);
    CHECK_FALSE(decision.unchanged);
    CHECK(decision.reading_count == 8);
    CHECK(procedure->phase() == "fresh");
}

TEST_CASE("a fresh comparison without change reads the one set of codes") {
    const auto space = plain_space({9});
    BenchOfOne bench;
    bench.truth = [](const Codes&) { return Truth{30, 30, 0.3, 0.3, true}; };
    const auto problem = problem_on(space, {{2}});
    auto same = make_fresh_comparison(problem, {{2}}, 3);
    CHECK(run(*same, problem, bench).asked == std::vector<Codes>(6, Codes{{2}}));
    CHECK(same->conclude().unchanged);
    // A repeat count of nothing is one round.
    auto once = make_fresh_comparison(problem, {{3}}, 0);
    CHECK(run(*once, problem, bench).asked.size() == 4);
    auto nothing = make_fresh_comparison(problem, {{3}}, 1);
    CHECK(nothing->conclude().reason.find("not been read") != std::string::npos);
    // Former codes that may not be written are not read again.
    const auto strict = plain_space({9}, {{{{0, 2, 2}}, ""}});
    const auto barred = problem_on(strict, {{2}});
    auto only_new = make_fresh_comparison(barred, {{5}}, 1);
    const auto outcome = run(*only_new, barred, bench);
    CHECK(outcome.asked == std::vector<Codes>(2, Codes{{5}}));
    CHECK(mentions(outcome.decision, "former codes"));
}

TEST_CASE("a fresh comparison that comes out worse says so") {
    const auto space = plain_space({9});
    BenchOfOne bench;
    bench.truth = [](const Codes& codes) {
        const double half = codes.value[0] == 2 ? 40 : 20;
        return Truth{half, half, 0.4, 0.4, true};
    };
    const auto problem = problem_on(space, {{2}});
    auto procedure = make_fresh_comparison(problem, {{6}}, 2);
    CHECK(mentions(run(*procedure, problem, bench).decision, "worse"));
}
