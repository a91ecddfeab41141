// What goes wrong behind our back in a reading: resets, codes that change, a monitor that lies.

#include <catch2/catch.hpp>

#include "counted_bench.hpp"
#include "drivers/board/sentinel.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

CountedBench& counted(SessionBench* bench) {
    return *static_cast<CountedBench*>(bench);
}

// Registers back to their reset values; the boot number stays, as on a board that has none.
void reset_silently(CountedBench& bench) {
    for (unsigned lane = 0; lane < 2; ++lane) bench.at(at_codes, lane) = 0;
    bench.at(at_guard) = 0;
}

Task<void> sentinel_tells_each_lane_once(SessionBench* bench) {
    CountedBench& chip = counted(bench);
    for (const Lane lane : {Lane{0}, Lane{1}}) {
        Result<SavedLane> saved = co_await bench->lanes().save(lane);
        if (!saved) co_return saved.error();
        Result<LaneReading> got = co_await bench->lanes().read(lane, counted_margin(9, 3), 1);
        if (!got) co_return got.error();
    }
    const std::uint32_t planted = chip.at(at_guard);
    CHECK(planted != 0);
    std::uint32_t starts = 0;
    chip.before = [&](const DoneWrite& done) {
        if (done.address == at_count && ++starts == 3) reset_silently(chip);
    };
    Result<LaneReading> hit = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 2);
    CHECK((!hit && hit.error().cause == Cause::board_reset));
    if (!hit) CHECK(hit.error().reg == "GUARD.value");
    CHECK(bench->statistics().resets == 1);
    chip.before = nullptr;
    Result<void> up = co_await bench->lanes().bring_up(Lane{0});
    if (!up) co_return up.error();
    CHECK(chip.at(at_guard) != 0);
    CHECK(chip.at(at_guard) != planted);
    Result<LaneReading> again = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 2);
    if (!again) co_return again.error();
    // Lane 1 had nothing under way; its codes are gone all the same.
    Result<LaneReading> other = co_await bench->lanes().read(Lane{1}, counted_margin(9, 3), 2);
    CHECK((!other && other.error().cause == Cause::board_reset));
    Result<void> up_too = co_await bench->lanes().bring_up(Lane{1});
    if (!up_too) co_return up_too.error();
    Result<LaneReading> then = co_await bench->lanes().read(Lane{1}, counted_margin(9, 3), 2);
    if (!then) co_return then.error();
    CHECK(bench->statistics().resets == 1);
    co_return Result<void>{};
}

// The boot number shows it first; the sentinel must not count it a second time.
Task<void> boot_number_and_sentinel_agree(SessionBench* bench) {
    CountedBench& chip = counted(bench);
    Result<LaneReading> first = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 1);
    if (!first) co_return first.error();
    chip.before = [&](const DoneWrite& done) {
        if (done.address != at_count || bench->scripted.boot != 7) return;
        reset_silently(chip);
        bench->scripted.reset();
    };
    Result<LaneReading> hit = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 2);
    CHECK((!hit && hit.error().cause == Cause::board_reset));
    Result<void> up = co_await bench->lanes().bring_up(Lane{0});
    if (!up) co_return up.error();
    Result<LaneReading> again = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 2);
    if (!again) co_return again.error();
    CHECK(bench->statistics().resets == 1);
    co_return Result<void>{};
}

Task<void> codes_change(SessionBench* bench) {
    CountedBench& chip = counted(bench);
    const bool latched = bench->board->file().monitor.procedure == MonitorProcedure::latched;
    const std::uint32_t start = latched ? at_go : at_count;
    chip.before = [&, start](const DoneWrite& done) {
        if (done.address == start) chip.at(at_codes) = 0x59;
    };
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 1);
    REQUIRE(!got);
    CHECK(got.error().cause == Cause::codes_changed);
    CHECK(got.error().reg == "EQ.b");
    CHECK(got.error().what.find("set to 3") != std::string::npos);
    CHECK(got.error().what.find("it was 5") != std::string::npos);
    CHECK(got.error().what.find("something else writes EQ.b") != std::string::npos);
    chip.before = nullptr;
    Result<LaneReading> anew = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 1);
    if (!anew) co_return anew.error();
    CHECK(anew->reading.codes.value == std::vector<std::int32_t>({9, 3}));
    co_return Result<void>{};
}

Task<void> codes_change_without_lock(SessionBench* bench) {
    CountedBench& chip = counted(bench);
    chip.at(at_status) = 0;
    Result<LaneReading> dark = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 1);
    if (!dark) co_return dark.error();
    CHECK(dark->reading.status == Status::no_lock);
    CHECK(dark->reading.counts.empty());
    CHECK(dark->reading.bit_count == 0);
    CHECK(dark->reading.telemetry.size() == 1);
    CHECK(chip.at(at_control) == 0);  // what was held is let go
    CHECK(chip.looks == 0);
    chip.before = [&](const DoneWrite& done) {
        if (done.address == at_control) chip.at(at_codes) = 0x38;
    };
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, counted_margin(9, 3), 2);
    chip.before = nullptr;
    CHECK((!got && got.error().cause == Cause::codes_changed));
    if (!got) CHECK(got.error().reg == "EQ.a");
    co_return Result<void>{};
}

Task<void> lies(SessionBench* bench) {
    counted(bench).pattern_errors_exceed_bits = true;
    Request request;
    request.codes = {{1, 1}};
    request.what = LooksWanted{{{0, 0, 1 << 12}}};
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, request, 1);
    CHECK((!got && got.error().cause == Cause::not_accepted));
    if (!got) CHECK(got.error().what.find("4097 errors in 4096 bits") != std::string::npos);
    co_return Result<void>{};
}

Task<void> has_no_room(SessionBench* bench) {
    counted(bench).at(at_origin) = 511 | 64 << 9;
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, counted_margin(1, 1), 1);
    CHECK((!got && got.error().cause == Cause::refused));
    if (!got) CHECK(got.error().text().find("no room to look") != std::string::npos);
    co_return Result<void>{};
}

}  // namespace

TEST_CASE("a reset that only the sentinel shows voids the reading and is told to each lane once") {
    CountedBench bench;
    bench.file.sentinel = FieldName{"GUARD", "value"};
    CHECK(good(bench.run(sentinel_tells_each_lane_once)));
}

TEST_CASE("a reset that the boot number shows is not found again by the sentinel") {
    CountedBench bench;
    bench.file.sentinel = FieldName{"GUARD", "value"};
    CHECK(good(bench.run(boot_number_and_sentinel_agree)));
}

TEST_CASE("a reset between two batches of looks makes the whole reading void") {
    CountedBench bench;
    CHECK(good(bench.run(boot_number_and_sentinel_agree)));
}

TEST_CASE("a code that changes during a counted reading is told by its register") {
    CountedBench bench;
    CHECK(good(bench.run(codes_change)));
}

TEST_CASE("a code that changes during a latched reading is told by its register") {
    CountedBench bench;
    bench.file = small_board();
    CHECK(good(bench.run(codes_change)));
}

TEST_CASE("without lock a counted reading takes no look, yet sees codes that change") {
    CountedBench bench;
    CHECK(good(bench.run(codes_change_without_lock)));
}

TEST_CASE("more errors than bits are no count") {
    CountedBench bench;
    CHECK(good(bench.run(lies)));
}

TEST_CASE("a decision point at the end of the monitor's range is refused") {
    CountedBench bench;
    CHECK(good(bench.run(has_no_room)));
}

TEST_CASE("sentinel values are never 0, never the reset value, and new in each generation") {
    BoardFile board = small_counted_board();
    board.sentinel = FieldName{"GUARD", "value"};
    for (const unsigned high : {3u, 7u, 31u}) {
        for (const std::uint32_t reset : {0u, 1u, 5u, 15u}) {
            for (RegisterDescription& reg : board.map.registers) {
                if (reg.name != "GUARD") continue;
                reg.fields[0].high_bit = high;
                reg.fields[0].reset = reset;
            }
            Sentinel sentinel(board);
            std::uint32_t last = reset;
            for (int i = 0; i < 200; ++i) {
                CAPTURE(high, reset, i);
                CHECK(sentinel.value() != 0);
                CHECK(sentinel.value() != reset);
                CHECK(sentinel.value() != last);
                last = sentinel.value();
                sentinel.found_fallen(sentinel.generation());
            }
        }
    }
}
