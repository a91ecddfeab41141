// A log in place of a board: other recipes, codes never read, the luck of the best of many.

#include <catch2/catch.hpp>
#include <cmath>

#include "daemon/replay/counterfactual.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

Reading reading_at(const Codes& codes, double height_mv) {
    Reading reading;
    reading.codes = codes;
    reading.status = Status::open;
    reading.up_mv = reading.down_mv = Measured{height_mv / 2, 1.0, Bound::exact};
    reading.left_ui = reading.right_ui = Measured{0.4, 0.005, Bound::exact};
    reading.error_ratio = 1e-6;
    reading.cost_s = 0.1;
    return reading;
}

LaneReadingRecord record(Codes codes, double height_mv, std::uint32_t ordinal,
                         Stage stage = Stage::search) {
    return {ordinal, stage, "", reading_at(codes, height_mv), 0};
}

ReplayProblem problem(const Recipe& recipe, Codes present) {
    return replay_problem_of(demo_board(), recipe, Lane{0}, 1, std::move(present));
}

ReplayedLane replayed(const ReplayProblem& what, const ReadingLog& log) {
    return replay_lane(what, log, scores_of(what, log));
}

}  // namespace

TEST_CASE("The same recipe on a run's own log decides as the run did, reading by reading") {
    EngineBench bench;
    const Start start = bench.start({});
    REQUIRE(start.outcome.has_value());
    const auto lanes = replay_with(demo_board(), demo_recipe(), {0, 1, 2}, 1, start.state);
    REQUIRE(lanes.size() == 3);
    for (const ReplayedLane& lane : lanes) {
        INFO("lane " << lane.lane << ": " << lane.cause);
        REQUIRE(lane.decision);
        const Decision& then = *start.state.lanes.at(lane.lane).decision;
        CHECK(lane.decision->codes == then.codes);
        CHECK(lane.decision->reason == then.reason);
        CHECK(lane.decision->notes == then.notes);
        CHECK(lane.decision->reading_count == then.reading_count);
        CHECK(lane.handed_out == then.reading_count);
        CHECK(lane.again == 0);
        CHECK(lane.never_read.empty());
        CHECK_FALSE(lane.same_until);
        // The comparison after the decision did not choose these codes.
        CHECK(lane.fresh_count >= 2);
        CHECK(lane.fresh);
    }
}

TEST_CASE("A smaller budget reads the beginning of the log and nothing else") {
    EngineBench bench;
    const Start start = bench.start({});
    Recipe recipe = demo_recipe();
    recipe.budget.standard_readings = 12;
    recipe.budget.bench_s = 0;
    for (const ReplayedLane& lane : replay_with(demo_board(), recipe, {0, 1, 2}, 1, start.state)) {
        REQUIRE(lane.decision);
        CHECK(lane.handed_out <= 12);
        CHECK(lane.handed_out >= 6);
    }
}

TEST_CASE("Codes never read are counted, named and taken as not allowed") {
    EngineBench bench;
    const Start start = bench.start({});
    Recipe recipe = demo_recipe();
    recipe.strategy.name = "exhaustive";
    recipe.strategy.stride = 4;
    for (const ReplayedLane& lane : replay_with(demo_board(), recipe, {0, 1, 2}, 1, start.state)) {
        INFO("lane " << lane.lane);
        CHECK_FALSE(lane.never_read.empty());
        REQUIRE(lane.same_until);
        const LaneState& state = start.state.lanes.at(lane.lane);
        const ReadingLog log(state.readings);
        for (const Codes& codes : lane.never_read) CHECK(log.of(codes).empty());
        for (std::size_t i = 0; i < lane.never_read.size(); ++i) {
            for (std::size_t k = 0; k < i; ++k) CHECK(lane.never_read[i] != lane.never_read[k]);
        }
        // A descent leaves hardly one code of a grid: nothing can be decided on it.
        CHECK_FALSE(lane.decision);
        CHECK_FALSE(lane.fresh);
        CHECK_THAT(lane.cause, Catch::Contains(std::to_string(lane.never_read.size()) + " of ") &&
                                   Catch::Contains("never read"));
    }
}

TEST_CASE("The same replay twice gives the same") {
    EngineBench bench;
    const Start start = bench.start({});
    Recipe recipe = demo_recipe();
    recipe.strategy.name = "descent_axes";
    const auto one = replay_with(demo_board(), recipe, {0, 1, 2}, 1, start.state);
    const auto other = replay_with(demo_board(), recipe, {0, 1, 2}, 1, start.state);
    for (std::size_t i = 0; i < one.size(); ++i) {
        CHECK(one[i].never_read == other[i].never_read);
        CHECK(one[i].decision->codes == other[i].decision->codes);
        CHECK(one[i].decision->reason == other[i].decision->reason);
    }
}

TEST_CASE("Readings of the same codes are handed out in order and then from the first again") {
    const Codes codes{{1, 2, 3, 4}};
    // The comparison's reading was taken in between, but it is no search's.
    const std::vector<LaneReadingRecord> records{
        record(codes, 40, 0), record(codes, 50, 1, Stage::compare), record(codes, 60, 2),
        record(codes, 70, 3, Stage::preflight)};
    const ReadingLog log(records);
    CHECK(log.reading_count() == 3);
    Answers answers(log);
    std::vector<double> heights;
    for (int i = 0; i < 5; ++i) heights.push_back(2 * answers.next(codes, 1e-6)->up_mv->value);
    CHECK(heights == std::vector<double>{40, 60, 50, 40, 60});
    CHECK(answers.handed_out() == 5);
    CHECK(answers.again() == 2);
    CHECK(answers.next(Codes{{0, 0, 0, 0}}, 1e-6) == nullptr);
    CHECK(answers.next(codes, 1e-9) == nullptr);
    CHECK(answers.readings(codes, 1e-6, false).empty());
    CHECK(answers.readings(codes, 1e-6, true).size() == 3);
}

TEST_CASE("A recipe that reads at another error ratio than the log holds is told so") {
    const std::vector<LaneReadingRecord> records{record({{1, 2, 3, 4}}, 40, 0)};
    const ReadingLog log(records);
    Recipe recipe = demo_recipe();
    recipe.search_error_ratio = 1e-8;
    const ReplayedLane lane = replayed(problem(recipe, {{1, 2, 3, 4}}), log);
    CHECK_FALSE(lane.decision);
    CHECK_THAT(lane.cause, Catch::Contains("search_error_ratio"));
    CHECK_THAT(lane.cause, Catch::Contains("1e-06"));
}

TEST_CASE("A log of one code decides nothing") {
    const std::vector<LaneReadingRecord> records{record({{1, 2, 3, 4}}, 40, 0)};
    const ReadingLog log(records);
    const ReplayedLane lane = replayed(problem(demo_recipe(), {{1, 2, 3, 4}}), log);
    CHECK_FALSE(lane.decision);
    CHECK_FALSE(lane.selected);
    CHECK(lane.rest_left_out == (lane.never_read.size() >= most_starts));
    CHECK_THAT(lane.cause, Catch::Contains("codes asked for were never read"));
}

TEST_CASE("A verdict at another error ratio than was read needs extrapolation to be accepted") {
    // More than the strategy's own last look at its finalists takes.
    std::vector<LaneReadingRecord> records{record({{1, 2, 3, 4}}, 60, 0)};
    for (std::uint32_t i = 0; i < 200; ++i) {
        records.push_back(record({{1, 2, 3, 4}}, 60, 100 + i, Stage::compare));
    }
    Recipe recipe = demo_recipe();
    recipe.dimensions = {"r1"};
    recipe.strategy.name = "exhaustive";
    recipe.strategy.stride = 32;
    recipe.required = {.error_ratio = 1e-12, .height_mv = 40, .width_ui = 0.1};
    recipe.search_error_ratio = 1e-6;
    for (LaneReadingRecord& each : records) {
        const Measured height{1.5, 0.01, Bound::exact}, width{0.005, 0.0001, Bound::exact};
        each.reading.slopes = EdgeSlopes{height, height, width, width};
    }
    for (std::int32_t r1 = 0; r1 < 32; ++r1) {
        if (r1 == 1) continue;
        records.push_back(record({{r1, 2, 3, 4}}, 20, static_cast<std::uint32_t>(r1) + 3));
    }
    const ReadingLog log(records);
    for (const bool accept : {false, true}) {
        recipe.accept_extrapolated = accept;
        const ReplayedLane lane = replayed(problem(recipe, {{1, 2, 3, 4}}), log);
        INFO(lane.cause);
        REQUIRE(lane.decision);
        CHECK(lane.read_at == 1e-6);
        CHECK(lane.fresh.has_value() == accept);
        REQUIRE(lane.selected);
        CHECK(lane.selected->raw.basis == Basis::extrapolated);
        CHECK(lane.selected->error_ratio == 1e-12);
        if (accept) CHECK(lane.fresh_error_ratio == 1e-12);
    }
}

TEST_CASE("The winner of an exhaustive log is too good and its shrunk score is not") {
    // Heights fall off evenly around one best point, each read once with noise as declared.
    Recipe recipe = demo_recipe();
    recipe.strategy.name = "exhaustive";
    recipe.strategy.stride = 1;
    recipe.budget = {};
    recipe.dimensions = {"r1", "r2"};
    recipe.required.height_mv = 30;
    recipe.required.width_ui = 0.1;
    recipe.strategy.allow_unchanged = false;
    constexpr int lanes = 60;
    constexpr double sigma_mv = 4;  // of a side
    double raw = 0, shrunk_sum = 0, spread = 0;
    for (int lane = 0; lane < lanes; ++lane) {
        Random noise({5, static_cast<std::uint32_t>(lane), 0, 0});
        const auto true_side = [&](std::int32_t r1, std::int32_t r2) {
            const double x = (r1 - 17.3) / 16, y = (r2 - 6.6) / 8;
            return 40 * std::exp(-0.25 * (x * x + y * y));
        };
        std::vector<LaneReadingRecord> records;
        for (std::int32_t r1 = 0; r1 < 32; ++r1) {
            for (std::int32_t r2 = 0; r2 < 16; ++r2) {
                if (r1 == 31 && r2 == 15) continue;  // the demo board's forbidden combination
                LaneReadingRecord one =
                    record({{r1, r2, 8, 4}}, 0, static_cast<std::uint32_t>(records.size()));
                // One side decides, so that the score's noise is the side's.
                one.reading.up_mv =
                    Measured{true_side(r1, r2) + sigma_mv * noise.normal(), sigma_mv, Bound::exact};
                one.reading.down_mv = Measured{500, sigma_mv, Bound::exact};
                records.push_back(std::move(one));
            }
        }
        const ReadingLog log(records);
        const ReplayedLane out = replayed(problem(recipe, {{0, 0, 8, 4}}), log);
        REQUIRE(out.decision);
        REQUIRE(out.selected);
        REQUIRE(out.selected->score);
        const Codes& codes = out.decision->codes;
        const double truth = 2 * true_side(codes.value[0], codes.value[1]) / 30;
        raw += (out.selected->raw.value - truth) / lanes;
        const double left = *out.selected->score - truth;
        shrunk_sum += left / lanes;
        spread += left * left / lanes;
    }
    const double sigma = 2 * sigma_mv / 30;
    const double error = std::sqrt(spread / lanes);
    INFO("raw " << raw / sigma << " sigma, shrunk " << shrunk_sum / sigma << " +- "
                << error / sigma);
    CHECK(raw > 1.5 * sigma);
    CHECK(std::abs(shrunk_sum) < 0.25 * raw + 3 * error);
    CHECK(std::abs(shrunk_sum) < 0.5 * sigma);
}
