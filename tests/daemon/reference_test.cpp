#include <catch2/catch.hpp>
#include <filesystem>

#include "daemon/engine/lane_setup.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

Fault fault_of(Cause cause, const std::string& what) {
    Fault fault;
    fault.cause = cause;
    fault.what = what;
    return fault;
}

std::vector<const LaneReadingRecord*> in_stage(const LaneState& lane, Stage stage) {
    std::vector<const LaneReadingRecord*> out;
    for (const LaneReadingRecord& record : lane.readings) {
        if (record.stage == stage) out.push_back(&record);
    }
    return out;
}

std::size_t shifts(const LaneState& lane) {
    const auto all = reference_readings(lane, monitor_noise_of(demo_board()), true);
    return static_cast<std::size_t>(
        std::count_if(all.begin(), all.end(), [](const auto& each) { return each.shift; }));
}

std::map<std::uint16_t, Codes> decisions(const Start& start) {
    std::map<std::uint16_t, Codes> out;
    for (const auto& [lane, state] : start.state.lanes) {
        if (state.decision) out[lane] = state.decision->codes;
    }
    return out;
}

// The Nth reading of any lane meets a reset.
auto reset_at(int nth, double after_reset_mv) {
    return [nth, after_reset_mv, reads = std::make_shared<int>(0)](FakeBoard& board) {
        board.after_reset_mv = after_reset_mv;
        board.before_operation = [nth, reads, &board](const std::string& what, Lane) {
            if (what != "read" || ++*reads != nth) return Fault{};
            board.reset();
            return fault_of(Cause::board_reset, "the board has reset");
        };
    };
}

// From the Nth to the Mth, lane 1's readings find codes that nobody of us wrote.
auto codes_change_in(int first, int last) {
    return [first, last, reads = std::make_shared<int>(0)](FakeBoard& board) {
        board.before_operation = [=](const std::string& what, Lane lane) {
            if (what != "read" || number(lane) != 1) return Fault{};
            const int now = ++*reads;
            if (now < first || now > last) return Fault{};
            Fault fault = fault_of(Cause::codes_changed, "expected 9, found 3");
            fault.reg = "EQ_R1.code";
            return fault;
        };
    };
}

}  // namespace

TEST_CASE("The reference code is read again every 20 readings, and the strategy never sees it") {
    EngineBench bench;
    const Start start = bench.start({});
    for (const auto& [lane, state] : start.state.lanes) {
        INFO(lane);
        const auto references = in_stage(state, Stage::reference);
        const std::size_t searched = in_stage(state, Stage::search).size();
        REQUIRE(searched >= 40);
        CHECK(references.size() == (searched - 1) / 20 - ((searched - 1) % 20 == 0 ? 1 : 0));
        CHECK(state.decision->reading_count == searched);
        std::size_t since = 0;
        for (const LaneReadingRecord& record : state.readings) {
            if (record.stage == Stage::search) CHECK(++since <= 21);
            if (record.stage != Stage::reference) continue;
            CHECK(record.reading.codes == FakeBoard::reset_codes());
            CHECK(record.ordinal >= 0x80000000u);
            since = 0;
        }
    }
}

TEST_CASE("The reference code is read again after ten minutes of charged bench time") {
    EngineBench bench;
    StartOptions options;
    options.recipe.dwell_s = 250;
    options.recipe.budget = {0, 0};
    options.recipe.wall_limit_s = 0;
    const Start start = bench.start(options);
    const LaneState& lane = start.state.lanes.at(0);
    REQUIRE(in_stage(lane, Stage::search).size() >= 9);
    std::size_t searched = 0;
    std::vector<std::size_t> at;
    for (const LaneReadingRecord& record : lane.readings) {
        if (record.stage == Stage::search) ++searched;
        if (record.stage == Stage::reference) at.push_back(searched);
    }
    // 2^43 bits at 25 Gb/s are 352 s; the first reading is the reference itself.
    REQUIRE(at.size() >= 2);
    CHECK(at[0] == 3);
    CHECK(at[1] == 5);
}

TEST_CASE("A lane that drifts is told, one that does not is not") {
    EngineBench still, drifting;
    const Start calm = still.start({});
    const Start moved = drifting.start({}, [](FakeBoard& board) { board.drift_mv = 0.2; });
    std::size_t calm_shifts = 0, moved_shifts = 0;
    for (const std::uint16_t lane : {0, 1, 2}) {
        calm_shifts += shifts(calm.state.lanes.at(lane));
        moved_shifts += shifts(moved.state.lanes.at(lane)) > 0;
    }
    CHECK(calm_shifts <= 1);  // of six readings or more at 5 % each
    CHECK(moved_shifts == 3);
}

TEST_CASE("After a reset every lane is brought up and its reference vouches for what follows") {
    EngineBench undisturbed, disturbed;
    const Start calm = undisturbed.start({});
    const Start rough = disturbed.start({}, reset_at(40, 0));
    REQUIRE(rough.outcome.has_value());
    CHECK(rough.outcome->ended.ending == Ending::complete);
    CHECK(decisions(rough) == decisions(calm));
    for (const std::uint16_t lane : {0, 1, 2}) {
        const LaneState& state = rough.state.lanes.at(lane);
        CHECK(state.reset_count == 1);
        CHECK(in_stage(state, Stage::reference).size() >
              in_stage(calm.state.lanes.at(lane), Stage::reference).size() - 1);
        const auto up = "bring_up " + std::to_string(lane);
        CHECK(std::count(disturbed.log.begin(), disturbed.log.end(), up) == 1);
    }
    // Between the reset and a lane's next search reading lies one of its reference.
    std::map<std::uint16_t, bool> vouched;
    for (const StoredEvent& event : rough.events) {
        if (const auto* reset = std::get_if<LaneReset>(&event.event)) {
            vouched[number(reset->lane)] = false;
        }
        const auto* intent = std::get_if<Intent>(&event.event);
        if (intent == nullptr || !vouched.contains(number(intent->lane))) continue;
        bool& known = vouched.at(number(intent->lane));
        if (intent->stage == Stage::reference) known = true;
        CHECK(known);
    }
}

TEST_CASE(
    "A board that reads otherwise after a reset stops the run, and goes on once it does not") {
    EngineBench bench;
    StartOptions options;
    options.board.preflight.limits.return_mv = 1;
    const Start start = bench.start(options, reset_at(40, 12));
    REQUIRE_FALSE(start.outcome.has_value());
    CHECK(start.outcome.error().cause == Cause::not_fit);
    CHECK(start.outcome.error().text().find("does not read as before") != std::string::npos);
    for (const std::uint16_t lane : {0, 1, 2}) {
        CHECK(bench.board_codes.at(lane) == FakeBoard::reset_codes());
    }
    CHECK_FALSE(std::filesystem::exists(bench.note_path));
    const Start again = bench.start(options);
    CHECK(again.run == start.run);
    REQUIRE(again.outcome.has_value());
    CHECK(again.outcome->ended.ending == Ending::complete);
}

TEST_CASE("Codes that changed without us once are written anew and nothing else happens") {
    EngineBench undisturbed, bench;
    const Start calm = undisturbed.start({});
    const Start start = bench.start({}, codes_change_in(10, 10));
    REQUIRE(start.outcome.has_value());
    CHECK(decisions(start) == decisions(calm));
    CHECK(start.state.lanes.at(1).codes_changed == 1);
    CHECK(start.state.lanes.at(1).finished->outcome == LaneOutcome::tuned);
}

TEST_CASE("Codes that change again fail the lane, and nothing more is written to it") {
    for (const auto& [first, last] : {std::pair{10, 11}, std::pair{1, 1000}}) {
        EngineBench bench;
        const Start start = bench.start({}, codes_change_in(first, last));
        REQUIRE(start.outcome.has_value());
        CHECK(start.outcome->ended.ending == Ending::complete);
        const LaneState& lane = start.state.lanes.at(1);
        CHECK(lane.finished->outcome == LaneOutcome::failed);
        CHECK(lane.finished->reason.find("something else writes EQ_R1.code") != std::string::npos);
        CHECK(lane.settled == Settlement::given_up);
        CHECK_FALSE(lane.moved);
        CHECK_FALSE(std::filesystem::exists(bench.note_path));
        CHECK(start.state.lanes.at(0).finished->outcome == LaneOutcome::tuned);
        const std::string last_read = "read 1 #" + std::to_string(first == 1 ? 0 : 9);
        const auto end = std::find(bench.log.rbegin(), bench.log.rend(), last_read);
        REQUIRE(end != bench.log.rend());
        for (auto after = end.base(); after != bench.log.end(); ++after) {
            INFO(*after);
            CHECK_FALSE(after->find(" 1") != std::string::npos);
        }
        CHECK(std::any_of(start.said.begin(), start.said.end(), [](const std::string& text) {
            return text.find("not written to any more") != std::string::npos;
        }));
    }
}
