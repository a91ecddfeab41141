#include <csignal>

#include "drivers/board/check.hpp"
#include "drivers/io/task_group.hpp"
#include "sim_target/monitor/monitored_lane.hpp"
#include "tests/wire/target_process.hpp"
#include "tests/wire/wire_bench.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

constexpr std::uint16_t lane_count = 8;

// Some open, some closed, none forbidden; in the board file's order: r1, r2, c1, c2.
std::vector<Codes> some_codes() {
    return {{{28, 2, 3, 3}}, {{9, 8, 8, 1}}, {{20, 4, 6, 2}}, {{4, 12, 10, 0}}};
}

Task<void> read_lane(Board& board, std::uint16_t lane, std::vector<LaneReading>& readings) {
    std::uint32_t ordinal = 1;
    for (const Codes& codes : some_codes()) {
        auto reading = co_await board.lanes().read(Lane{lane}, margin_at(codes), ordinal++);
        if (reading.has_error()) co_return reading.error();
        readings.push_back(*reading);
    }
    co_return Result<void>{};
}

// All lanes beside each other; lanes that share a monitor must take turns.
std::vector<std::vector<LaneReading>> read_all(WireBench& bench) {
    std::vector<std::vector<LaneReading>> readings(lane_count);
    TaskGroup group(bench.io);
    for (std::uint16_t lane = 0; lane < lane_count; ++lane) {
        group.spawn("lane", read_lane(*bench.board, lane, readings[lane]));
    }
    const auto joined = bench.run(group.join());
    INFO((joined.has_error() ? joined.error().text() : std::string()));
    REQUIRE(joined.has_value());
    return readings;
}

std::vector<std::vector<LaneReading>> readings_over(const nlohmann::json& target, bool serial) {
    TargetProcess process(target);
    WireBench bench(demo_board(serial ? process.serial() : process.tcp(), 400));
    REQUIRE(bench.open().has_value());
    return read_all(bench);
}

// An edge less than half a step away leaves no room around the decision point, flag or no flag.
bool shows_opening(const sim::LatchedEdges& edges) {
    return !edges.closed && edges.up > 0 && edges.down > 0 && edges.left > 0 && edges.right > 0;
}

}  // namespace

TEST_CASE("The check of a good board finds it over TCP and over a serial port") {
    const bool serial = GENERATE(false, true);
    TargetProcess process(demo_target());
    WireBench bench(demo_board(serial ? process.serial() : process.tcp()));
    const auto opened = bench.open();
    INFO((opened.has_error() ? opened.error().text() : std::string()));
    REQUIRE(opened.has_value());
    const auto report = bench.run(check_board(*bench.board, 50));
    REQUIRE(report.has_value());
    CHECK(report->good());
    CHECK(report->identity.simulated);
    CHECK(report->identity.values.front().value == 0x4F5A5238);
    CHECK(report->link.bad_frames == 0);
    CHECK(report->link.retries == 0);
}

TEST_CASE("Codes are applied, read back and survive until they are changed") {
    TargetProcess process(demo_target());
    WireBench bench(demo_board(process.tcp()));
    REQUIRE(bench.open().has_value());
    LaneReader& lanes = bench.board->lanes();
    CHECK(bench.run(lanes.codes(Lane{3}))->value == std::vector<std::int32_t>{28, 2, 3, 3});
    const Codes wanted{{9, 15, 14, 1}};
    const auto applied = bench.run(lanes.apply(Lane{3}, wanted));
    REQUIRE(applied.has_value());
    CHECK(applied->codes == wanted);
    CHECK(*bench.run(lanes.codes(Lane{3})) == wanted);
    CHECK(bench.run(lanes.codes(Lane{2}))->value == std::vector<std::int32_t>{28, 2, 3, 3});
}

TEST_CASE("Readings are equal over TCP and serial for equal ordinals, and are those of the chip") {
    const auto tcp = readings_over(demo_target(), false);
    const auto serial = readings_over(demo_target(), true);
    Complaints complaints;
    const auto target =
        sim::load_target(LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json", complaints);
    REQUIRE(target);
    int open = 0;
    for (std::uint16_t lane = 0; lane < lane_count; ++lane) {
        sim::MonitoredLane monitor(*target, lane);
        for (std::size_t i = 0; i < some_codes().size(); ++i) {
            CAPTURE(lane, i);
            CHECK(tcp[lane][i].wire == serial[lane][i].wire);
            const Reading& reading = tcp[lane][i].reading;
            CHECK(reading.codes == some_codes()[i]);
            const std::vector<std::int32_t> code = some_codes()[i].value;
            // In the board's order: the number comes behind the wait for lock, or not at all.
            if (!monitor.put({code[0], code[2], code[1], code[3]}, true)) {
                CHECK(reading.status == Status::no_lock);
                continue;
            }
            monitor.number(i + 1);
            const auto latched = monitor.latch(sim::LookTime{}, 1e-6, 1u << 22);
            CHECK((reading.status == Status::open || reading.status == Status::saturated) ==
                  shows_opening(latched));
            if (reading.status != Status::open) continue;
            ++open;
            CHECK(reading.up_mv->value == Approx(latched.up * target->monitor.height_step_mv));
            CHECK(reading.down_mv->value == Approx(latched.down * target->monitor.height_step_mv));
            CHECK(reading.left_ui->value == Approx(latched.left * target->monitor.width_step_ui));
            CHECK(reading.right_ui->value == Approx(latched.right * target->monitor.width_step_ui));
        }
    }
    CHECK(open > 0);
}

TEST_CASE("Lanes that share a monitor take turns where its dwell takes time") {
    // 2^22 bits at 25 Gb/s dwell 0.17 ms; here a hundred times as long.
    nlohmann::json slow = demo_target();
    slow["time_scale"] = 100;
    slow["wire"]["latency_us"] = 0;
    slow["wire"]["lock_us"] = 0;
    const auto turns = readings_over(slow, false);
    const auto alone = readings_over(demo_target(), false);
    for (std::uint16_t lane = 0; lane < lane_count; ++lane) {
        for (std::size_t i = 0; i < some_codes().size(); ++i) {
            CAPTURE(lane, i);
            CHECK(turns[lane][i].reading.up_mv == alone[lane][i].reading.up_mv);
            CHECK(turns[lane][i].reading.left_ui == alone[lane][i].reading.left_ui);
        }
    }
}

TEST_CASE("The simulated board ends on SIGTERM with code 0 and takes its link along") {
    TargetProcess process(demo_target());
    CHECK(std::filesystem::is_symlink(process.pty_path()));
    CHECK(process.end(SIGTERM) == 0);
    CHECK_FALSE(std::filesystem::is_symlink(process.pty_path()));
}

TEST_CASE("A reset in mid-batch makes its reading void, and the reading is taken anew") {
    nlohmann::json target = demo_target();
    target["faults"]["reset"]["at_batches"] = {12};
    TargetProcess process(target);
    WireBench bench(demo_board(process.tcp()));
    REQUIRE(bench.open().has_value());
    int voids = 0;
    const Codes wanted{{9, 15, 14, 1}};
    for (std::uint32_t i = 1; i <= 20; ++i) {
        const auto reading =
            bench.run(read_until_valid(*bench.board, Lane{0}, margin_at(wanted), i, voids));
        REQUIRE(reading.has_value());
        CHECK(reading->reading.codes == wanted);
    }
    CHECK(voids >= 1);
    CHECK(bench.board->statistics().resets == 1);
}
