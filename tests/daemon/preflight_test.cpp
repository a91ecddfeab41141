#include <catch2/catch.hpp>
#include <filesystem>

#include "adapt/stats/random.hpp"
#include "daemon/engine/preflight.hpp"
#include "daemon/engine/preflight_probe.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

StatusExpectation expectation(const std::string& name, const FieldName& field,
                              std::uint32_t equals) {
    StatusExpectation out;
    out.name = name;
    out.field = field;
    out.equals = equals;
    return out;
}

const std::vector<StatusExpectation>& all_expectations() {
    static const std::vector<StatusExpectation> all{
        expectation("reference_clock", {"CLOCK", "present"}, 1),
        expectation("lock", {"RX_STATUS", "lock"}, 1),
        expectation("pattern_sync", {"RX_STATUS", "pattern_sync"}, 1),
        expectation("polarity", {"RX_STATUS", "inverted"}, 0),
        expectation("lane_order", {"LANE_TAG", "value"}, 0),
        expectation("loops", {"RX_STATUS", "loops_running"}, 1)};
    return all;
}

// A run that looks first, on the demo board with limits that the fake board keeps.
StartOptions with_preflight() {
    StartOptions options;
    options.lanes = {0, 2};  // with a monitor each
    options.preflight = true;
    options.board.preflight.items = all_expectations();
    PreflightLimits& limits = options.board.preflight.limits;
    limits.repeatability_mv = 2;
    limits.repeatability_ui = 0.012;
    limits.return_mv = 1;
    limits.return_ui = 0.01;
    limits.settle_s.reset();
    return options;
}

void healthy(FakeBoard& board) {
    for (const StatusExpectation& each : all_expectations()) {
        board.status_items.push_back({each.name, each.field, each.equals, each.equals});
    }
}

void wrong_status(FakeBoard& board, const std::string& name) {
    healthy(board);
    for (StatusItem& each : board.status_items) {
        if (each.name == name) each.found = each.expected + 1;
    }
}

// What every failed item must do: stop the run, be named, and leave the board as it was found.
void check_stopped(const EngineBench& bench, const Start& start, const std::string& name) {
    INFO(name);
    REQUIRE_FALSE(start.outcome.has_value());
    INFO(start.outcome.error().text());
    CHECK(start.outcome.error().cause == Cause::not_fit);
    CHECK(start.outcome.error().what.find(name) != std::string::npos);
    CHECK(start.outcome.error().what.find("expected") != std::string::npos);
    CHECK_FALSE(start.outcome.error().hint.empty());
    const PreflightItem* item = start.state.measured_item(name);
    REQUIRE(item != nullptr);
    CHECK(item->result == ItemResult::failed);
    for (const std::uint16_t lane : {0, 2}) {
        CHECK(bench.board_codes.at(lane) == FakeBoard::reset_codes());
        CHECK_FALSE(start.state.lanes.at(lane).searched);
    }
    CHECK_FALSE(std::filesystem::exists(bench.note_path));
}

std::size_t readings_in(const Start& start, Stage stage) {
    std::size_t count = 0;
    for (const auto& [lane, state] : start.state.lanes) {
        for (const LaneReadingRecord& record : state.readings) count += record.stage == stage;
    }
    return count;
}

BoardFile counting(BoardFile board) {
    board.monitor.procedure = MonitorProcedure::counted;
    board.monitor.height.most_steps = 256;
    board.monitor.counted.least_bits = 1024;
    return board;
}

}  // namespace

TEST_CASE("A healthy board passes every item, and the measured noise is what the strategies get") {
    EngineBench bench;
    const Start start = bench.start(with_preflight(), healthy);
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    for (const char* name : {"reference_clock", "lock", "pattern_sync", "polarity", "lane_order",
                             "loops", item::monitor, item::repeatability, item::return_error,
                             item::settle_time, item::parallel}) {
        INFO(name);
        const PreflightItem* item = start.state.measured_item(name);
        REQUIRE(item != nullptr);
        CHECK(item->result == ItemResult::passed);
    }
    for (const std::uint16_t lane : {0, 2}) {
        const LaneState& state = start.state.lanes.at(lane);
        REQUIRE(state.noise);
        // The fake board's noise is 1 mV and 0.006 UI; sigma from 38 degrees of freedom lies within
        // 40 % of it in all but a handful of a thousand runs, the return error adds a little.
        CHECK(state.noise->noise.height_sigma_mv == Approx(1.0).epsilon(0.5));
        CHECK(state.noise->noise.width_sigma_ui == Approx(0.006).epsilon(0.6));
        CHECK(state.noise->noise.height_step_mv == 2);
        CHECK(state.finished->outcome == LaneOutcome::tuned);
    }
    CHECK(bench.most_at_once == 2);
}

TEST_CASE("Each wrong status item stops the run by its name before anything is searched") {
    for (const StatusExpectation& each : all_expectations()) {
        EngineBench bench;
        const Start start = bench.start(with_preflight(),
                                        [&](FakeBoard& board) { wrong_status(board, each.name); });
        check_stopped(bench, start, each.name);
        CHECK(start.outcome.error().what.find(each.field.text()) != std::string::npos);
    }
}

TEST_CASE("A lane without lock at its present codes is looked at again with codes that open it") {
    EngineBench bench;
    const Start start = bench.start(with_preflight(), [](FakeBoard& board) {
        healthy(board);
        board.status_of = [&board](Lane lane, std::vector<StatusItem>& items) {
            const bool read = std::any_of(board.log.begin(), board.log.end(), [&](const auto& l) {
                return l.starts_with("read " + std::to_string(number(lane)) + " ");
            });
            if (!read) items[1].found = 0;
        };
    });
    REQUIRE(start.outcome.has_value());
    CHECK(start.state.measured_item("lock")->result == ItemResult::passed);
    CHECK(start.state.item(item::open_codes, Lane{2})->result == ItemResult::passed);
}

TEST_CASE("A reset between open codes and the look at them has the codes written again") {
    EngineBench bench;
    int looks = 0;
    bool put = false;  // codes, on lane 2 since the reset
    const Start start = bench.start(with_preflight(), [&](FakeBoard& board) {
        healthy(board);
        board.status_of = [&](Lane lane, std::vector<StatusItem>& items) {
            if (lane == Lane{2} && !put) items[1].found = 0;
        };
        board.before_operation = [&](const std::string& what, Lane lane) {
            Fault fault;
            if (lane != Lane{2}) return fault;
            if (what == "read") put = true;
            if (what != "status" || ++looks != 2) return fault;
            board.reset();
            put = false;
            fault.cause = Cause::board_reset;
            fault.what = "the board has reset";
            return fault;
        };
    });
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    CHECK(start.state.measured_item("lock")->result == ItemResult::passed);
    CHECK(looks == 4);  // at the codes found, at the reset, behind it, at open codes again
}

TEST_CASE("A latching monitor whose eye is smaller at a higher error ratio stops the run") {
    EngineBench bench;
    const Start start = bench.start(with_preflight(), [](FakeBoard& board) {
        healthy(board);
        board.smaller_at_higher_ratio = true;
    });
    check_stopped(bench, start, item::monitor);
    CHECK(start.outcome.error().what.find("not monotone") != std::string::npos);
}

TEST_CASE("A counting monitor must show half errors far outside, the bits asked for, and a rise") {
    struct Case {
        FakeBoard::Counts counts;
        const char* words;
    };
    for (const Case& each : {Case{FakeBoard::Counts::few_far_outside, "far outside"},
                             Case{FakeBoard::Counts::other_bits, "bits: "},
                             Case{FakeBoard::Counts::not_rising, "not monotone"}}) {
        EngineBench bench;
        StartOptions options = with_preflight();
        options.board = counting(options.board);
        const Start start = bench.start(options, [&](FakeBoard& board) {
            healthy(board);
            board.counting = each.counts;
        });
        check_stopped(bench, start, item::monitor);
        CHECK(start.outcome.error().what.find(each.words) != std::string::npos);
    }
    EngineBench bench;
    StartOptions options = with_preflight();
    options.board = counting(options.board);
    const Start start = bench.start(options, healthy);
    REQUIRE(start.outcome.has_value());
    CHECK(start.state.measured_item(item::monitor)->result == ItemResult::passed);
}

TEST_CASE("A monitor that repeats itself worse than the board file allows stops the run") {
    EngineBench bench;
    const Start start = bench.start(with_preflight(), [](FakeBoard& board) {
        healthy(board);
        board.sigma_scale = 4;
    });
    check_stopped(bench, start, item::repeatability);
}

TEST_CASE("Readings that are all the same do not replace the declared noise by none") {
    RunState state;
    PreflightItem repeats;
    repeats.name = item::repeatability;
    repeats.result = ItemResult::passed;
    repeats.values = {{"height_sigma_mv", 0}, {"width_sigma_ui", 0}};
    MonitorNoise declared;
    declared.height_step_mv = 2;
    declared.height_sigma_mv = 1;
    declared.width_sigma_ui = 0.006;
    state.preflight = {repeats};
    CHECK_FALSE(measured_noise(state, declared));
    state.preflight[0].values["height_sigma_mv"] = 0.1;
    // A step of 2 mV hides an even spread of 2 / sqrt(12) mV (Sheppard, 1898).
    CHECK(measured_noise(state, declared)->height_sigma_mv == Approx(0.57735).epsilon(1e-4));
    CHECK(measured_noise(state, declared)->width_sigma_ui == 0.006);
    state.preflight[0].values["height_sigma_mv"] = 1.5;
    CHECK(measured_noise(state, declared)->height_sigma_mv == 1.5);
}

TEST_CASE("Codes that do not come back to where they were stop the run") {
    EngineBench bench;
    const Start start = bench.start(with_preflight(), [](FakeBoard& board) {
        healthy(board);
        board.return_sigma_mv = 8;
    });
    check_stopped(bench, start, item::return_error);
}

TEST_CASE("Codes that still move when they are read stop the run, and the time it takes is told") {
    EngineBench bench;
    StartOptions options = with_preflight();
    const auto slow = [](FakeBoard& board) {
        healthy(board);
        board.settling_mv = 30;
        board.settling_s = 1e-3;
    };
    const Start start = bench.start(options, slow);
    check_stopped(bench, start, item::settle_time);
    // 30 mV fall below the noise after 3 to 4 time constants: the decade of 10 ms.
    CHECK(start.state.measured_item(item::settle_time)->values.at("extra_wait_s") == 1e-2);
    SECTION("a limit that allows for it lets the run go on") {
        options.board.preflight.limits.settle_s = 0.05;
        options.anew = true;
        EngineBench other;
        CHECK(other.start(options, slow).outcome.has_value());
    }
}

TEST_CASE("Lanes that disturb each other are run one at a time") {
    EngineBench bench;
    const Start start = bench.start(with_preflight(), [](FakeBoard& board) {
        healthy(board);
        board.crosstalk_mv = 6;
    });
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    const PreflightItem* parallel = start.state.item(item::parallel);
    REQUIRE(parallel != nullptr);
    CHECK(parallel->result == ItemResult::noted);
    CHECK(parallel->found.find("lanes 0 and 2 read otherwise together than alone: ") !=
          std::string::npos);
    // One lane is through before the other's search begins.
    bool first_is_through = false;
    for (const StoredEvent& event : start.events) {
        if (const auto* finished = std::get_if<LaneFinished>(&event.event)) {
            first_is_through = first_is_through || number(finished->lane) == 0;
        }
        const auto* intent = std::get_if<Intent>(&event.event);
        if (intent == nullptr || intent->stage != Stage::search) continue;
        CHECK(first_is_through == (number(intent->lane) == 2));
    }
}

TEST_CASE("What holds for the board is measured once, and again under another condition") {
    EngineBench bench;
    const Start first = bench.start(with_preflight(), healthy);
    REQUIRE(first.outcome.has_value());
    CHECK(readings_in(first, Stage::preflight) > 40);
    StartOptions again = with_preflight();
    again.seed = 2;
    const Start second = bench.start(again, healthy);
    REQUIRE(second.outcome.has_value());
    CHECK(readings_in(second, Stage::preflight) == 4);  // the monitors of two lanes, twice each
    const PreflightItem* known = second.state.measured_item(item::repeatability);
    REQUIRE(known != nullptr);
    CHECK(known->from == first.run);
    CHECK(second.state.lanes.at(0).noise->noise.height_sigma_mv ==
          first.state.lanes.at(0).noise->noise.height_sigma_mv);
    CHECK(second.state.lanes.at(0).noise->from == first.run);
    StartOptions hot = with_preflight();
    hot.condition = "hot";
    CHECK(readings_in(bench.start(hot, healthy), Stage::preflight) > 40);
    StartOptions longer = with_preflight();
    longer.seed = 3;
    longer.recipe.dwell_s = 0.4;  // other settings, other noise
    CHECK(readings_in(bench.start(longer, healthy), Stage::preflight) > 40);
}

TEST_CASE("The preflight alone measures everything, restores the codes and searches nothing") {
    EngineBench bench;
    StartOptions options = with_preflight();
    options.only_preflight = true;
    const Start start = bench.start(options, healthy);
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    CHECK(readings_in(start, Stage::search) == 0);
    CHECK(start.state.measured_item(item::parallel) != nullptr);
    for (const std::uint16_t lane : {0, 2}) {
        CHECK(bench.board_codes.at(lane) == FakeBoard::reset_codes());
        CHECK_FALSE(start.state.lanes.at(lane).moved);
    }
    CHECK_FALSE(std::filesystem::exists(bench.note_path));
    SECTION("a tune after it knows what it found") {
        const Start tuned = bench.start(with_preflight(), healthy);
        CHECK(tuned.state.measured_item(item::repeatability)->from == start.run);
        CHECK(readings_in(tuned, Stage::preflight) == 4);
    }
    SECTION("another one measures anew, and goes past what fails") {
        const Start worse = bench.start(options, [](FakeBoard& board) {
            wrong_status(board, "polarity");
            board.sigma_scale = 4;
        });
        REQUIRE(worse.outcome.has_value());
        CHECK(worse.run != start.run);
        CHECK(worse.state.item("polarity")->result == ItemResult::failed);
        CHECK(worse.state.measured_item(item::repeatability)->result == ItemResult::failed);
    }
}

TEST_CASE(
    "A preflight that was stopped in the middle goes on where it was, to the same decisions") {
    EngineBench undisturbed;
    const Start calm = undisturbed.start(with_preflight(), healthy);
    // In the monitors' check, in the repeatability, and where two lanes are read at once.
    for (const int stop_at : {2, 15, 75}) {
        INFO(stop_at);
        EngineBench bench;
        StartOptions options = with_preflight();
        int stored = 0;
        options.on_event = [&stored, stop_at](const StoredEvent& event, Stop& stop) {
            if (std::holds_alternative<ReadingTaken>(event.event) && ++stored == stop_at) {
                stop.request();
            }
        };
        const Start stopped = bench.start(options, healthy);
        REQUIRE(stopped.outcome.has_value());
        CHECK(stopped.outcome->ended.ending == Ending::stopped);
        CHECK(readings_in(stopped, Stage::search) == 0);
        CHECK(bench.board_codes.at(0) == FakeBoard::reset_codes());
        const Start resumed = bench.start(with_preflight(), healthy);
        REQUIRE(resumed.outcome.has_value());
        CHECK(resumed.run == stopped.run);
        CHECK(resumed.outcome->ended.ending == Ending::complete);
        for (const std::uint16_t lane : {0, 2}) {
            CHECK(resumed.state.lanes.at(lane).decision->codes ==
                  calm.state.lanes.at(lane).decision->codes);
            CHECK(resumed.state.lanes.at(lane).noise->noise.height_sigma_mv ==
                  calm.state.lanes.at(lane).noise->noise.height_sigma_mv);
        }
        const std::size_t more = stop_at == 75 ? 20 : 0;
        CHECK(readings_in(resumed, Stage::preflight) <= readings_in(calm, Stage::preflight) + more);
    }
}

TEST_CASE("A board reset in the middle of the preflight is mended and the run completes") {
    EngineBench bench;
    int reads = 0;
    const Start start = bench.start(with_preflight(), [&reads](FakeBoard& board) {
        healthy(board);
        board.before_operation = [&reads, &board](const std::string& what, Lane) {
            if (what != "read" || ++reads != 12) return Fault{};
            board.reset();
            Fault fault;
            fault.cause = Cause::board_reset;
            fault.what = "the board has reset";
            return fault;
        };
    });
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    CHECK(std::count_if(bench.log.begin(), bench.log.end(),
                        [](const auto& line) { return line.starts_with("bring_up"); }) == 2);
}

TEST_CASE("A strategy is charged nothing for the preflight") {
    EngineBench with, without;
    const Start looked = with.start(with_preflight(), healthy);
    StartOptions plain = with_preflight();
    plain.preflight = false;
    const Start blind = without.start(plain, healthy);
    for (const std::uint16_t lane : {0, 2}) {
        const Decision& one = *looked.state.lanes.at(lane).decision;
        const Decision& other = *blind.state.lanes.at(lane).decision;
        CHECK(one.standard_readings <= 60);
        CHECK(one.reading_count + 20 > other.reading_count);
        CHECK(looked.state.lanes.at(lane).readings.front().stage == Stage::preflight);
    }
}
