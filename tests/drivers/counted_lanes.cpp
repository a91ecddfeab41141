// Readings of a counted monitor over a scripted board: looks, counts, origin, cost, bytes.

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>

#include "counted_bench.hpp"
#include "drivers/board/counted_look.hpp"
#include "drivers/io/task_group.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

// Normal deviate of an error ratio of 1e-6: erfc(4.753424 / sqrt 2) / 2 = 1e-6 (root of the
// complementary error function, as tabulated for bit error ratios).
constexpr double q_at_1e_6 = 4.753424;

CountedBench& counted(SessionBench* bench) {
    return *static_cast<CountedBench*>(bench);
}

double value_of(const Reading& reading, const std::string& name) {
    for (const Telemetry& each : reading.telemetry) {
        if (each.name == name) return each.value;
    }
    return std::nan("");
}

void check_edge(const std::optional<Measured>& edge, double expected, double step) {
    REQUIRE(edge);
    CHECK(edge->bound == Bound::exact);
    CHECK(std::abs(edge->value - expected) < 0.5 * step);
    CHECK(edge->std_error < 0.5 * step);
}

Task<void> finds_the_edges(SessionBench* bench) {
    const std::uint64_t bytes_before = bench->scripted.bytes_in + bench->scripted.bytes_out;
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 41);
    if (!got) co_return got.error();
    const double bytes =
        static_cast<double>(bench->scripted.bytes_in + bench->scripted.bytes_out - bytes_before);
    const Reading& reading = got->reading;
    const KnownEye& eye = counted(bench).eye;
    CHECK(reading.status == Status::open);
    CHECK(reading.error_ratio == Approx(1e-6));
    check_edge(reading.up_mv, eye.up_mv - q_at_1e_6 * eye.sigma_mv, 2.0);
    check_edge(reading.down_mv, eye.down_mv - q_at_1e_6 * eye.sigma_mv, 2.0);
    check_edge(reading.left_ui, eye.left_ui - q_at_1e_6 * eye.sigma_ui, 1.0 / 64);
    check_edge(reading.right_ui, eye.right_ui - q_at_1e_6 * eye.sigma_ui, 1.0 / 64);
    CHECK(reading.slopes);
    CHECK(reading.codes.value == std::vector<std::int32_t>({9, 3}));
    CHECK(reading.counts.size() == counted(bench).looks);
    CHECK(reading.counts.size() <= 16);
    std::uint64_t bits = 0;
    for (const Count& count : reading.counts) bits += count.look.bits;
    CHECK(reading.bit_count == bits);
    CHECK(reading.cost_s == Approx(0.001 + 0.0002 * static_cast<double>(reading.counts.size()) +
                                   static_cast<double>(bits) / 25e9));
    CHECK(value_of(reading, "heat_c") == Approx(36));
    CHECK(value_of(reading, "origin_mv") == Approx(0));
    CHECK(bench->scripted.registers[at_note] == 41);
    const auto starts =
        std::count_if(got->wire.begin(), got->wire.end(), [](const WireOperation& operation) {
            return operation.kind == WireOperation::Kind::write && operation.address == at_count;
        });
    CHECK(static_cast<std::size_t>(starts) == reading.counts.size());
    INFO(bytes << " bytes for " << reading.counts.size() << " looks");
    CHECK(bytes / static_cast<double>(reading.counts.size()) <= 50);
    co_return Result<void>{};
}

Request given_looks() {
    Request request;
    request.codes = {{1, 1}};
    request.what =
        LooksWanted{{{0, 0, 1 << 20}, {0, 100, 1 << 20}, {0.25, 0, 1 << 20}, {-0.251, 11.3, 3000}}};
    return request;
}

Task<void> takes_given_looks(SessionBench* bench) {
    CountedBench& chip = counted(bench);
    chip.at(at_origin) = 250 | 70 << 9;
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, given_looks(), 2);
    if (!got) co_return got.error();
    const Reading& reading = got->reading;
    CHECK(reading.status == Status::open);
    CHECK(!reading.up_mv);
    REQUIRE(reading.counts.size() == 4);
    CHECK(reading.counts[0].errors == 0);
    CHECK(reading.counts[0].look == Look{0, 0, 1 << 20});
    CHECK(reading.counts[1].look.offset_mv == 100);
    CHECK(static_cast<double>(reading.counts[1].errors) ==
          Approx((1 << 20) * chip.eye.error_ratio(100, 0)).margin(1));
    CHECK(reading.counts[2].look.phase_ui == 0.25);
    CHECK(reading.counts[3].look.phase_ui == -0.25);  // at the nearest step
    CHECK(reading.counts[3].look.offset_mv == 12);
    CHECK(reading.counts[3].look.bits == 4096);     // the next power of two
    CHECK(chip.at(at_point) == (250u | 86u << 9));  // of the last one taken, told from the origin
    CHECK(value_of(reading, "origin_mv") == Approx(-12));
    CHECK(value_of(reading, "origin_ui") == Approx(6.0 / 64));
    // Taken by dwell, phase, offset: phases -0.25, 0, 0, 0.25, offsets 12, 0, 100, 0.
    const auto writes_of = [&](std::uint32_t mask) {
        return std::count_if(got->wire.begin(), got->wire.end(),
                             [mask](const WireOperation& operation) {
                                 return operation.kind == WireOperation::Kind::write &&
                                        operation.address == at_point && operation.mask == mask;
                             });
    };
    CHECK(writes_of(0x1FF) == 1);
    CHECK(writes_of(0xFE00) == 0);
    CHECK(writes_of(0xFFFF) == 3);  // both at once
    co_return Result<void>{};
}

Task<void> refuses_looks(SessionBench* bench) {
    const auto count = bench->scripted.writes.size();
    Request far = given_looks();
    std::get<LooksWanted>(far.what).looks[0].offset_mv = 512;
    Result<LaneReading> beyond = co_await bench->lanes().read(Lane{0}, far, 1);
    CHECK((!beyond && beyond.error().cause == Cause::not_allowed));
    Request none = given_looks();
    std::get<LooksWanted>(none.what).looks.clear();
    Result<LaneReading> empty = co_await bench->lanes().read(Lane{0}, none, 1);
    CHECK((!empty && empty.error().cause == Cause::bad_config));
    Request half = counted_margin(1, 1);
    std::get<MarginWanted>(half.what).error_ratio = 0.5;
    Result<LaneReading> ratio = co_await bench->lanes().read(Lane{0}, half, 1);
    CHECK((!ratio && ratio.error().cause == Cause::bad_config));
    Request slow = counted_margin(1, 1);
    slow.wait_s = std::nan("");
    Result<LaneReading> wait = co_await bench->lanes().read(Lane{0}, slow, 1);
    CHECK((!wait && wait.error().cause == Cause::bad_config));
    CHECK(bench->scripted.writes.size() == count);
    co_return Result<void>{};
}

Task<void> waits_before_looking(SessionBench* bench) {
    Request request = given_looks();
    request.wait_s = 25;
    const TimePoint began = bench->time.now();
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, request, 1);
    if (!got) co_return got.error();
    CHECK(bench->time.now() - began >= std::chrono::seconds(25));
    CHECK(got->reading.cost_s >= 25.0018);
    CHECK(got->reading.cost_s < 25.01);
    co_return Result<void>{};
}

Task<void> read_often(SessionBench* bench, Lane lane) {
    for (std::uint32_t ordinal = 1; ordinal <= 3; ++ordinal) {
        Result<LaneReading> got = co_await bench->lanes().read(lane, counted_margin(9, 3), ordinal);
        if (!got) co_return got.error();
        CHECK(got->reading.status == Status::open);
    }
    co_return Result<void>{};
}

// The lane whose ordinal was written last is the one that holds the monitor.
Task<void> shares_a_monitor(SessionBench* bench) {
    unsigned holder = 9;
    int intruders = 0;
    counted(bench).before = [&](const DoneWrite& done) {
        for (unsigned lane = 0; lane < 2; ++lane) {
            if (done.address == at_note + 0x40 * lane) holder = lane;
            if (done.address == at_count + 0x40 * lane && holder != lane) ++intruders;
        }
    };
    TaskGroup lanes(bench->io);
    lanes.spawn("lane 0", read_often(bench, Lane{0}));
    lanes.spawn("lane 1", read_often(bench, Lane{1}));
    const Result<void> joined = co_await lanes.join();
    counted(bench).before = nullptr;
    CHECK(intruders == 0);
    co_return joined;
}

StatusExpectation expects(const char* name, FieldName field, std::uint32_t equals) {
    StatusExpectation out;
    out.name = name;
    out.field = std::move(field);
    out.equals = equals;
    return out;
}

Task<void> tells_status(SessionBench* bench) {
    counted(bench).at(at_tag, 1) = 0;  // lanes swapped
    const std::uint64_t before = bench->scripted.batches_begun;
    Result<std::vector<StatusItem>> got = co_await bench->lanes().status(Lane{1});
    if (!got) co_return got.error();
    CHECK(bench->scripted.batches_begun == before + 1);
    REQUIRE(got->size() == 2);
    CHECK(got->at(0).name == "lock");
    CHECK(got->at(0).right());
    CHECK(got->at(1).name == "lane_order");
    CHECK(got->at(1).found == 0);
    CHECK(got->at(1).expected == 1);
    co_return Result<void>{};
}

}  // namespace

TEST_CASE("a counted reading finds the edges of a known eye within half a step, cheaply") {
    CountedBench bench;
    CHECK(good(bench.run(finds_the_edges)));
}

TEST_CASE("given looks are counted in their order, told from the origin, at the nearest step") {
    CountedBench bench;
    CHECK(good(bench.run(takes_given_looks)));
}

TEST_CASE("given looks come out the same on a board that takes only small batches") {
    CountedBench bench;
    bench.scripted.most_operations = 16;
    bench.scripted.largest_payload = 64;
    CHECK(good(bench.run(takes_given_looks)));
    CHECK(bench.scripted.batches_begun > 4);
}

TEST_CASE("what a counted monitor cannot do is refused before any write") {
    CountedBench bench;
    CHECK(good(bench.run(refuses_looks)));
}

TEST_CASE("a request's wait stands between codes and looks and is charged") {
    CountedBench bench;
    CHECK(good(bench.run(waits_before_looking)));
}

TEST_CASE("lanes that share a counting monitor hold it for a whole reading") {
    CountedBench bench;
    bench.file.monitor.shared_by = {{0, 1}};
    CHECK(good(bench.run(shares_a_monitor)));
}

TEST_CASE("the status of a lane is read in one batch and told item by item") {
    CountedBench bench;
    bench.file.preflight.items = {expects("lock", {"STATUS", "lock"}, 1),
                                  expects("lane_order", {"TAG", "value"}, 0)};
    bench.file.preflight.items[1].equals_lane = true;
    CHECK(good(bench.run(tells_status)));
}

TEST_CASE("looks reach as far as the nearer end of the codes lets them, seen from the origin") {
    const BoardFile board = small_counted_board();
    LookScale scale(board);
    REQUIRE(scale.set_origin(200, 100).has_value());
    CHECK(scale.grid().offset_most_steps == 200);
    CHECK(scale.grid().phase_most_steps == 27);
    CHECK(scale.grid().most_errors == 0xFFFFFF);
    CHECK(scale.placed({0, -450, 1024}).offset_mv == -400);
    CHECK(scale.placed({0, 0, 1}).bits == 1024);
    CHECK(scale.origin_mv() == -112);
    CHECK(scale.set_origin(0, 64).has_error());
    CHECK(scale.set_origin(256, 127).has_error());
}
