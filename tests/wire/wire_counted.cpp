// Counted readings against the simulated board in a process of its own.

#include <algorithm>
#include <cmath>

#include "drivers/io/task_group.hpp"
#include "tests/wire/counting_link.hpp"
#include "tests/wire/target_process.hpp"
#include "tests/wire/wire_bench.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

constexpr std::uint16_t lane_count = 8;

std::vector<Codes> some_codes() {
    return {{{28, 2, 3, 3}}, {{9, 8, 8, 1}}, {{20, 4, 6, 2}}};
}

Request counted_at(Codes codes) {
    Request request;
    request.codes = std::move(codes);
    request.what = MarginWanted{1e-6, std::uint64_t{1} << 30, {}};
    return request;
}

Task<void> read_lane(Board& board, std::uint16_t lane, std::vector<Reading>& readings, int& voids) {
    std::uint32_t ordinal = 1;
    for (const Codes& codes : some_codes()) {
        auto got =
            co_await read_until_valid(board, Lane{lane}, counted_at(codes), ordinal++, voids);
        if (got.has_error()) co_return got.error();
        readings.push_back(got->reading);
    }
    co_return Result<void>{};
}

struct AllReadings {
    std::vector<std::vector<Reading>> lanes = std::vector<std::vector<Reading>>(lane_count);
    int voids = 0;
    SessionStatistics link;
};

// All lanes beside each other.
AllReadings read_all(const nlohmann::json& target, bool serial) {
    TargetProcess process(target);
    WireBench bench(demo_counted_board(serial ? process.serial() : process.tcp(), 400));
    REQUIRE(bench.open().has_value());
    AllReadings out;
    TaskGroup group(bench.io);
    for (std::uint16_t lane = 0; lane < lane_count; ++lane) {
        group.spawn("lane", read_lane(*bench.board, lane, out.lanes[lane], out.voids));
    }
    const auto joined = bench.run(group.join());
    INFO((joined.has_error() ? joined.error().text() : std::string()));
    REQUIRE(joined.has_value());
    out.link = bench.board->statistics();
    return out;
}

void check_same(const AllReadings& one, const AllReadings& other) {
    for (std::uint16_t lane = 0; lane < lane_count; ++lane) {
        for (std::size_t i = 0; i < some_codes().size(); ++i) {
            CAPTURE(lane, i);
            const Reading &a = one.lanes[lane][i], &b = other.lanes[lane][i];
            CHECK(a.codes == some_codes()[i]);
            CHECK(a.status == b.status);
            CHECK(a.counts == b.counts);
            CHECK(a.up_mv == b.up_mv);
            CHECK(a.left_ui == b.left_ui);
            CHECK(a.cost_s == b.cost_s);
        }
    }
}

double value_of(const Reading& reading, const std::string& name) {
    for (const Telemetry& each : reading.telemetry) {
        if (each.name == name) return each.value;
    }
    return std::nan("");
}

}  // namespace

TEST_CASE("Counted readings are equal over TCP and serial for equal ordinals") {
    const AllReadings tcp = read_all(demo_target(), false);
    const AllReadings serial = read_all(demo_target(), true);
    check_same(tcp, serial);
    int open = 0;
    for (const auto& lane : tcp.lanes) {
        for (const Reading& reading : lane) {
            open += reading.status == Status::open ? 1 : 0;
            // -40 to 125 degrees is the usual range of such parts: common practice.
            CHECK(value_of(reading, "die_temperature_c") > -40);
            CHECK(value_of(reading, "die_temperature_c") < 125);
            CHECK(value_of(reading, "supply_v") > 0.5);
            if (reading.status == Status::no_lock) continue;
            CHECK(!reading.counts.empty());
            CHECK(std::abs(value_of(reading, "origin_mv")) < 50);
        }
    }
    CHECK(open > 0);
}

TEST_CASE("Counted readings come out the same over a line that flips, cuts and doubles frames") {
    nlohmann::json bad = demo_target();
    for (const char* fault : {"flip", "cut", "twice"}) bad["faults"][fault]["probability"] = 0.02;
    const AllReadings disturbed = read_all(bad, false);
    CHECK(disturbed.link.retries > 0);
    check_same(disturbed, read_all(demo_target(), false));
}

TEST_CASE("A reset in the midst of counted readings makes them void, and they are taken anew") {
    nlohmann::json target = demo_target();
    target["faults"]["reset"]["at_batches"] = {14};
    const AllReadings reset = read_all(target, false);
    CHECK(reset.voids >= 1);
    CHECK(reset.link.resets == 1);
    for (const auto& lane : reset.lanes) {
        for (std::size_t i = 0; i < lane.size(); ++i) CHECK(lane[i].codes == some_codes()[i]);
    }
}

TEST_CASE("A sentinel beside the boot number neither hides a reset nor counts it twice") {
    nlohmann::json target = demo_target();
    target["faults"]["reset"]["at_batches"] = {14};
    TargetProcess process(target);
    BoardFile file = demo_counted_board(process.tcp(), 400);
    file.sentinel = FieldName{"SENTINEL", "value"};
    WireBench bench(file);
    REQUIRE(bench.open().has_value());
    int voids = 0;
    for (std::uint32_t i = 1; i <= 8; ++i) {
        const auto reading = bench.run(
            read_until_valid(*bench.board, Lane{0}, counted_at(some_codes()[i % 3]), i, voids));
        REQUIRE(reading.has_value());
    }
    CHECK(voids >= 1);
    CHECK(bench.board->statistics().resets == 1);
}

TEST_CASE("The status of a good lane is as the board file expects it") {
    TargetProcess process(demo_target());
    WireBench bench(demo_counted_board(process.tcp()));
    REQUIRE(bench.open().has_value());
    LaneReader& lanes = bench.board->lanes();
    REQUIRE(bench.run(lanes.apply(Lane{2}, some_codes().front())).has_value());
    const auto status = bench.run(lanes.status(Lane{2}));
    REQUIRE(status.has_value());
    CHECK(status->size() == 6);
    for (const StatusItem& item : *status) {
        CAPTURE(item.name, item.found, item.expected);
        CHECK(item.right());
    }
}

TEST_CASE("All bytes of an open counted reading shared out over its looks are at most 50 a look") {
    TargetProcess process(demo_target());
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    Traffic traffic;
    const BoardFile file = demo_counted_board(process.tcp(), 400);
    auto link = std::make_unique<CountingLink>(make_link(time, file.link), traffic);
    auto board = run_until_done(time, open_board(file, std::move(link), time)).value();
    double bytes = 0, looks = 0;
    for (std::uint16_t lane = 0; lane < lane_count; ++lane) {
        std::uint32_t ordinal = 1;
        for (const Codes& codes : some_codes()) {
            const std::uint64_t before = traffic.both();
            const auto got =
                run_until_done(time, board->lanes().read(Lane{lane}, counted_at(codes), ordinal++));
            REQUIRE(got.has_value());
            if (got->reading.status != Status::open) continue;
            bytes += static_cast<double>(traffic.both() - before);
            looks += static_cast<double>(got->reading.counts.size());
        }
    }
    run_until_done(time, board->close()).value();
    REQUIRE(looks > 0);
    CAPTURE(bytes, looks);
    CHECK(bytes / looks <= 50);
}
