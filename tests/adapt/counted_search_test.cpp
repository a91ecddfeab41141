// What counted readings change for a search: scores carried to another ratio, verdicts on them,
// charges by what was spent, and where the next reading is told to look.

#include <catch2/catch.hpp>
#include <cmath>
#include <limits>
#include <vector>

#include "adapt/search/descent.hpp"
#include "adapt/search/ledger.hpp"
#include "adapt/search/score.hpp"
#include "adapt/search/verdict.hpp"
#include "adapt/stats/normal.hpp"
#include "tests/adapt/bench_of_one.hpp"
#include "tests/adapt/counting_lane.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();

Reading counted_reading(double half_height_mv, double slope_mv) {
    Reading reading;
    reading.status = Status::open;
    reading.error_ratio = 1e-7;
    reading.cost_s = 0.08;
    reading.up_mv = reading.down_mv = Measured{half_height_mv, 0.2, Bound::exact};
    reading.left_ui = reading.right_ui = Measured{0.3, 0.002, Bound::exact};
    const Measured height{slope_mv, 0.1, Bound::exact}, width{0.01, 0.001, Bound::exact};
    reading.slopes = EdgeSlopes{height, height, width, width};
    reading.bit_count = 1'000'000'000;
    return reading;
}

// Amplitude falls off around the best codes; the monitor counts.
CountingLane lane_at(const CodeSpace& space, const Codes& codes, const Codes& best) {
    const Truth truth = cone(space, codes, best, 120, 0.5, 0.9);
    CountingLane lane;
    lane.noise_mv = 4;
    lane.level_mv = truth.up_mv + normal_q(2e-6) * lane.noise_mv;
    lane.random_jitter_ui = 0.012;
    return lane;
}

}  // namespace

TEST_CASE("a score below the ratio counted is carried along the slopes and marked") {
    const Reading reading = counted_reading(30, 3);
    CHECK(score_of(reading, {1e-7, 40, 0.3}).basis == Basis::counted);
    CHECK(score_of(reading, {1e-7, 40, 0.3}).value == Approx(1.5));
    // A ratio above the one counted is left as it is: the edges there are no nearer.
    CHECK(score_of(reading, {1e-6, 40, 0.3}).value == Approx(1.5));
    const Score carried = score_of(reading, {1e-12, 40, 0.3});
    CHECK(carried.basis == Basis::extrapolated);
    // Q of 1e-12 is 7.03448383, of 1e-7 5.19933758 (normal distribution, common practice).
    CHECK(carried.value == Approx(2 * (30 - 3 * (7.03448383 - 5.19933758)) / 40).epsilon(1e-7));
    CHECK(carried.std_error > score_of(reading, {1e-7, 40, 0.3}).std_error);
}

TEST_CASE("an edge whose slope was not told has no lower limit elsewhere") {
    Reading reading = counted_reading(30, 3);
    reading.slopes->down_mv = {0, 0, Bound::at_least};
    CHECK(std::isfinite(score_of(reading, {1e-7, 40, 0.3}).low));
    CHECK(score_of(reading, {1e-12, 40, 0.3}).low == -infinity);
    // Latched readings carry no slopes and stay as they are.
    reading.slopes.reset();
    CHECK(score_of(reading, {1e-12, 40, 0.3}).basis == Basis::counted);
    CHECK(score_of(reading, {1e-12, 40, 0.3}).value == Approx(1.5));
}

TEST_CASE("an extrapolated score meets only where the recipe accepts that") {
    const Required required{1e-12, 40, 0.3};
    const std::vector<Reading> good(4, counted_reading(40, 3));
    const auto refused = judge(good, required, {}, false);
    CHECK(refused.verdict == Verdict::undecided);
    CHECK(refused.reason.find("extrapolated") != std::string::npos);
    const auto accepted = judge(good, required, {}, true);
    CHECK(accepted.verdict == Verdict::meets);
    CHECK(accepted.reason.find("extrapolated") != std::string::npos);
    // Failing needs no acceptance: the edge at a lower ratio is nearer still.
    const std::vector<Reading> bad(4, counted_reading(20, 3));
    CHECK(judge(bad, required, {}, false).verdict == Verdict::fails);
}

TEST_CASE("what a monitor's positions are off by does not average away") {
    const std::vector<Reading> readings(16, counted_reading(30, 3));
    MonitorNoise even, uneven;
    uneven.height_nonlinearity_mv = 0.4;
    CHECK(mean_of(readings, even).up_mv->std_error == Approx(0.2 / 4));
    CHECK(mean_of(readings, uneven).up_mv->std_error == Approx(0.2));
    uneven.height_nonlinearity_mv = 0.2;
    CHECK(mean_of(readings, uneven).up_mv->std_error ==
          Approx(std::sqrt(0.01 + (0.04 - 0.01) / 16)));
    // Slopes keep the error of the surest of them.
    REQUIRE(mean_of(readings, even).slopes);
    CHECK(mean_of(readings, even).slopes->up_mv.value == Approx(3));
    CHECK(mean_of(readings, even).slopes->up_mv.std_error == Approx(0.1));
}

TEST_CASE("centre error ratios of closed eyes are averaged over their bits") {
    Reading one = counted_reading(-5, 3), other = one;
    one.status = other.status = Status::closed;
    one.centre_error_ratio = 1e-3;
    other.centre_error_ratio = 4e-3;
    other.bit_count = 2 * one.bit_count;
    CHECK(*mean_of(std::vector{one, other}, {}).centre_error_ratio == Approx(3e-3));
    other.centre_error_ratio.reset();
    CHECK_FALSE(mean_of(std::vector{one, other}, {}).centre_error_ratio);
}

TEST_CASE("the step's tolerance stands apart from what readings scatter") {
    CHECK(systematic_mv(40, 0.1) == Approx(4));
    CHECK(systematic_mv(-40, 0.1) == Approx(4));
    CHECK(systematic_mv(40, -1) == 0);
}

TEST_CASE("a latched edge weighs guesses by the chance of its step and a counted one as normal") {
    // Half a step to either side, blurred by a quarter of it: symmetric about what was latched.
    const Measured latched{40, 0.6, Bound::exact};
    CHECK(edge_log_likelihood(latched, 2, 0.5, 40) == Approx(std::log(0.954499736)).epsilon(1e-8));
    CHECK(edge_log_likelihood(latched, 2, 0.5, 41) ==
          Approx(edge_log_likelihood(latched, 2, 0.5, 39)));
    CHECK(edge_log_likelihood(latched, 2, 0, 40.9) == 0);
    CHECK(edge_log_likelihood(latched, 2, 0, 41.1) == -infinity);
    const Measured closed{1, 0, Bound::at_most}, beyond{254, 0, Bound::at_least};
    CHECK(edge_log_likelihood(closed, 2, 0, -30) == 0);
    CHECK(edge_log_likelihood(closed, 2, 0, 3) == -infinity);
    CHECK(edge_log_likelihood(beyond, 2, 0, 300) == 0);
    const Measured counted{40, 0.3, Bound::exact};
    CHECK(edge_log_likelihood(counted, 0, 0.4, 40) - edge_log_likelihood(counted, 0, 0.4, 41) ==
          Approx(0.5 / 0.25));
}

TEST_CASE("a counted margin is reserved at its upper cost and charged what it took") {
    const CodeSpace space = plain_space({8, 8});
    LaneProblem problem = problem_on(space, {{1, 1}}, 10);
    problem.cost = {0.001, 0.0002, 16, 25e9, true};
    problem.reading = {1e-6, 2'500'000'000, {}};
    problem.budget.bench_s = 1;
    Ledger ledger(problem);
    const double reserved = cost_s(problem.cost, ledger.request({{1, 1}}, {}, ""));
    CHECK(reserved == Approx(0.001 + 16 * 0.0002 + 0.1));
    CHECK(ledger.affordable() == 9);  // 1 s of 0.1042 s each
    Reading reading = counted_reading(30, 3);
    reading.codes = {{1, 1}};
    reading.cost_s = 0.02;
    ledger.add({{1, 1}}, reading);
    CHECK(ledger.bench_s() == Approx(0.02));
    CHECK(ledger.standard_readings() == Approx(1));
    CHECK(ledger.affordable() == 9);
    // A longer one counts as what it takes: 40 looks, or a quarter of a second.
    reading.counts.assign(40, Count{{0, 2, 1'000'000}, 3, false});
    ledger.add({{1, 1}}, reading);
    CHECK(ledger.standard_readings() == Approx(1 + 2.5));
    reading.counts.assign(2, Count{{0, 2, 3'125'000'000}, 3, false});
    ledger.add({{1, 1}}, reading);
    CHECK(ledger.standard_readings() == Approx(1 + 2.5 + 2.5));
}

TEST_CASE(
    "the next reading is told where the nearest codes had their edges, the latest of equals") {
    const CodeSpace space = plain_space({16, 16});
    const LaneProblem problem = problem_on(space, {{1, 1}});
    Ledger ledger(problem);
    const auto expected = [&](Codes codes) {
        return std::get<MarginWanted>(ledger.request(std::move(codes), {}, "").what).expected;
    };
    CHECK(expected({{2, 2}}) == Expected{});
    const auto add = [&](Codes codes, double height_mv, Status status) {
        Reading reading = counted_reading(height_mv, 3);
        reading.codes = codes;
        reading.status = status;
        ledger.add(codes, reading);
    };
    add({{1, 1}}, 30, Status::open);
    add({{9, 9}}, 50, Status::open);
    add({{3, 3}}, 70, Status::closed);
    CHECK(expected({{2, 2}}).up_mv == 30);
    CHECK(expected({{8, 9}}).up_mv == 50);
    CHECK(expected({{8, 9}}).left_ui == 0.3);
    add({{9, 9}}, 52, Status::open);
    CHECK(expected({{8, 9}}).up_mv == 52);
    // Of a latched reading, nothing.
    Reading latched = counted_reading(90, 3);
    latched.slopes.reset();
    latched.codes = {{12, 2}};
    ledger.add({{12, 2}}, latched);
    CHECK(expected({{12, 2}}).up_mv == 52);
}

TEST_CASE("closed eyes that are counted can be told apart") {
    const Required required{1e-6, 40, 0.3};
    Reading near = counted_reading(-2, 3), far = counted_reading(-20, 3);
    for (Reading* reading : {&near, &far}) {
        reading->status = Status::closed;
        reading->error_ratio = 1e-6;
        reading->left_ui = reading->right_ui = Measured{-0.01, 0.001, Bound::exact};
    }
    CHECK(merit_of(near, required) > merit_of(far, required));
    CHECK(gives_slope(merit_of(far, required)));
    Reading latched = near;
    for (auto* edge : {&latched.up_mv, &latched.down_mv, &latched.left_ui, &latched.right_ui}) {
        *edge = Measured{1, 0.5, Bound::at_most};
    }
    CHECK_FALSE(gives_slope(merit_of(latched, required)));
    CHECK_FALSE(gives_slope(Merit{}));
}

TEST_CASE("a descent over counted readings leads from a closed eye to an open one") {
    const CodeSpace space = plain_space({32, 16});
    const Codes best{{24, 11}};
    LaneProblem problem = problem_on(space, {{1, 1}}, 60);
    problem.required = {1e-6, 60, 0.25};
    problem.cost = {0.001, 0.0002, 16, 25e9, true};
    problem.reading = {1e-6, 2'500'000'000, {}};
    problem.noise = {};
    const auto search = make_descent(problem, {}, {1, 0, 0, 0});
    const LookGrid grid = demo_grid();
    std::uint32_t ordinal = 0;
    bool began_closed = false;
    for (auto requests = search->propose({}); !requests.empty(); requests = search->propose({})) {
        std::vector<Reading> readings;
        for (const Request& request : requests) {
            const CountingLane lane = lane_at(space, request.codes, best);
            const auto counted =
                tests::read(lane, grid, std::get<MarginWanted>(request.what), ordinal++);
            REQUIRE(counted);
            readings.push_back(counted->reading);
            readings.back().codes = request.codes;
            began_closed =
                began_closed || (ordinal == 1 && counted->reading.status == Status::closed);
        }
        search->observe(readings);
    }
    CHECK(began_closed);
    const Decision decision = search->conclude();
    CHECK_FALSE(decision.unchanged);
    CHECK(cone(space, decision.codes, best, 120, 0.5, 0.9).up_mv > 0.9 * 60);
    CHECK(decision.standard_readings <= 60);
}
