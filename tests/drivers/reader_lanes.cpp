// The board reader over a scripted board: sequences, read-backs, readings, saving and restoring.

#include <algorithm>
#include <catch2/catch.hpp>

#include "drivers/board/check.hpp"
#include "drivers/board/sequences.hpp"
#include "drivers/io/task_group.hpp"
#include "session_bench.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

// Lists in braces inside coroutines are more than this compiler can take.
Codes codes(std::int32_t a, std::int32_t b) {
    return {{a, b}};
}

Request single_look() {
    Request request;
    request.codes = codes(1, 1);
    request.what = LooksWanted{{Look{0, 0, 1000}}};
    return request;
}

Request margin_at(std::int32_t a, std::int32_t b) {
    Request request;
    request.codes = {{a, b}};
    request.what = MarginWanted{1e-6, 2500000000};
    return request;
}

// The board's chip: `go` latches what stands in the edge registers below.
void give_edges(SessionBench& bench, std::uint32_t up, std::uint32_t closed) {
    bench.scripted.registers[at_monitor] = closed << 1;
    bench.scripted.registers[at_up] = up;
    bench.scripted.registers[at_up + 1] = 18;
    bench.scripted.registers[at_up + 2] = 20;
    bench.scripted.registers[at_up + 3] = 127;
}

Task<void> reads_one_margin(SessionBench* bench) {
    give_edges(*bench, 15, 0);
    const std::uint64_t before = bench->scripted.batches_begun;
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, margin_at(9, 3), 41);
    if (!got) co_return got.error();
    CHECK(bench->scripted.batches_begun == before + 1);
    const Reading& reading = got->reading;
    CHECK(reading.status == Status::saturated);  // right stands at the counter's top
    CHECK(reading.codes == codes(9, 3));
    REQUIRE(reading.up_mv);
    CHECK(reading.up_mv->value == Approx(30));
    CHECK(reading.left_ui->value == Approx(20.0 / 64));
    CHECK(reading.right_ui->bound == Bound::at_least);
    CHECK(reading.error_ratio == Approx(1e-6));
    CHECK(reading.bit_count == std::uint64_t{1} << 32);
    CHECK(reading.cost_s == Approx(0.001 + 0.0002 + 4294967296.0 / 25e9));
    CHECK(bench->scripted.registers[at_note] == 41);
    CHECK(bench->scripted.registers[at_setup] == (6u << 8 | 32u));
    CHECK(bench->scripted.registers[at_codes] == 0x39);
    CHECK(bench->scripted.registers[at_control] == 0);
    CHECK(got->wire.size() == 18);  // the codes once more at the end
    CHECK(got->wire[1].address == at_codes);
    CHECK(got->wire[1].read_back);
    CHECK(got->wire[1].result == 0x9);
    CHECK(got->wire[4].kind == WireOperation::Kind::pause);
    co_return Result<void>{};
}

Task<void> reads_closed_eye(SessionBench* bench) {
    give_edges(*bench, 15, 1);
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, margin_at(1, 1), 1);
    if (!got) co_return got.error();
    CHECK(got->reading.status == Status::closed);
    CHECK(got->reading.up_mv->bound == Bound::at_most);
    co_return Result<void>{};
}

Task<void> reads_without_lock(SessionBench* bench) {
    bench->scripted.registers[at_status] = 0;
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, margin_at(2, 4), 1);
    if (!got) co_return got.error();
    CHECK(got->reading.status == Status::no_lock);
    CHECK(!got->reading.up_mv);
    CHECK(got->reading.codes == codes(2, 4));
    CHECK(got->reading.bit_count == 0);
    CHECK(bench->scripted.registers[at_control] == 0);  // what was held is let go
    CHECK(bench->scripted.registers[at_setup] == 0);    // the monitor was not started
    Result<Applied> applied = co_await bench->lanes().apply(Lane{0}, codes(2, 5));
    if (!applied) co_return applied.error();
    CHECK(!applied->locked);
    CHECK(applied->codes == codes(2, 5));
    co_return Result<void>{};
}

Task<void> reads_what_cannot_be(SessionBench* bench) {
    const auto count = bench->scripted.writes.size();
    Request low = margin_at(1, 1);
    low.what = MarginWanted{1e-12, 1000000};
    Result<LaneReading> ratio = co_await bench->lanes().read(Lane{0}, low, 1);
    CHECK((!ratio && ratio.error().cause == Cause::bad_config));
    Result<LaneReading> single = co_await bench->lanes().read(Lane{0}, single_look(), 1);
    CHECK((!single && single.error().cause == Cause::bad_config));
    Result<LaneReading> forbidden = co_await bench->lanes().read(Lane{0}, margin_at(15, 15), 1);
    CHECK((!forbidden && forbidden.error().cause == Cause::not_allowed));
    Result<LaneReading> beyond = co_await bench->lanes().read(Lane{2}, margin_at(1, 1), 1);
    CHECK((!beyond && beyond.error().cause == Cause::not_allowed));
    CHECK(bench->scripted.writes.size() == count);
    co_return Result<void>{};
}

Task<void> code_that_does_not_stick(SessionBench* bench) {
    bench->scripted.on_write = [bench](const DoneWrite& done) {
        if (done.address == at_codes) bench->scripted.registers[at_codes] &= ~0x20u;
    };
    Result<Applied> applied = co_await bench->lanes().apply(Lane{0}, codes(9, 3));
    CHECK((!applied && applied.error().cause == Cause::not_accepted));
    if (!applied) CHECK(applied.error().reg == "EQ.b");
    for (const DoneWrite& each : bench->scripted.writes) CHECK(each.address != at_load);
    co_return Result<void>{};
}

Task<void> saves_and_restores(SessionBench* bench) {
    bench->scripted.registers[at_codes] = 0x52;
    bench->scripted.registers[at_control] = 0x81;  // held, and bits of nobody
    bench->scripted.registers[at_note] = 99;
    bench->scripted.registers[at_setup] = 6u << 8 | 20u;
    Result<SavedLane> saved = co_await bench->lanes().save(Lane{0});
    if (!saved) co_return saved.error();
    CHECK(saved->fields.at(0).field.text() == "EQ.a");
    CHECK(saved->fields.at(0).value == 2);
    CHECK(saved->fields.at(0).dimension == "a");
    CHECK(saved->fields.at(1).value == 5);
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, margin_at(9, 3), 41);
    if (!got) co_return got.error();
    CHECK(bench->scripted.registers[at_note] == 41);
    Result<Codes> restored = co_await bench->lanes().restore(Lane{0}, *saved);
    if (!restored) co_return restored.error();
    CHECK(*restored == codes(2, 5));
    CHECK(bench->scripted.registers[at_codes] == 0x52);
    CHECK(bench->scripted.registers[at_control] == 0x81);
    CHECK(bench->scripted.registers[at_note] == 99);
    CHECK(bench->scripted.registers[at_setup] == (6u << 8 | 20u));
    Result<void> up = co_await bench->lanes().bring_up(Lane{0});
    if (!up) co_return up.error();
    CHECK(bench->scripted.registers[at_key] == 0xABCD);
    CHECK(bench->scripted.registers[at_control] == 0x80);
    co_return Result<void>{};
}

Task<void> checks_the_board(SessionBench* bench) {
    Result<CheckReport> report = co_await check_board(*bench->board, 20);
    if (!report) co_return report.error();
    CHECK(report->good());
    CHECK(report->trials.size() == 6);
    CHECK(report->identity.values.at(0) == IdentityValue{"chip", 0x1234});
    CHECK(report->round_trips.count() >= 20);
    CHECK(report->round_trips.shortest() >= std::chrono::milliseconds(2));
    CHECK(report->dialect == "framed");
    CHECK(bench->scripted.registers[at_scratch] == 0x77);
    for (const DoneWrite& each : bench->scripted.writes) CHECK(each.address == at_scratch);
    co_return Result<void>{};
}

Task<void> checks_a_bad_bit(SessionBench* bench) {
    bench->scripted.on_write = [bench](const DoneWrite&) {
        bench->scripted.registers[at_scratch] |= 0x8;
    };
    Result<CheckReport> report = co_await check_board(*bench->board, 1);
    if (!report) co_return report.error();
    CHECK(!report->good());
    CHECK(report->trials.at(0).written == 0);
    CHECK(report->trials.at(0).read == 8);
    CHECK(report->trials.at(1).right());
    co_return Result<void>{};
}

// Both lanes at once; the board notes whether one monitor was ever started twice.
Task<void> read_lane(SessionBench* bench, Lane lane) {
    for (std::uint32_t ordinal = 1; ordinal <= 5; ++ordinal) {
        Result<LaneReading> got = co_await bench->lanes().read(lane, margin_at(9, 3), ordinal);
        if (!got) co_return got.error();
    }
    co_return Result<void>{};
}

int most_at_once = 0;

Task<void> reads_both_lanes(SessionBench* bench) {
    int running = 0;
    most_at_once = 0;
    // A margin sequence runs from the write of the ordinal to that of the start.
    bench->scripted.on_write = [&](const DoneWrite& done) {
        const bool begins = done.address == at_note || done.address == at_note + 0x40;
        const bool starts = done.address == at_go || done.address == at_go + 0x40;
        running += begins ? 1 : 0;
        most_at_once = std::max(most_at_once, running);
        running -= starts ? 1 : 0;
    };
    TaskGroup lanes(bench->io);
    lanes.spawn("lane 0", read_lane(bench, Lane{0}));
    lanes.spawn("lane 1", read_lane(bench, Lane{1}));
    const Result<void> joined = co_await lanes.join();
    bench->scripted.on_write = nullptr;
    co_return joined;
}

Task<void> reads_unstrobed(SessionBench* bench) {
    bench->scripted.registers[at_codes] = 0x00;
    Result<LaneReading> got = co_await bench->lanes().read(Lane{0}, margin_at(12, 12), 1);
    if (!got) co_return got.error();
    std::string order;
    for (const DoneWrite& each : bench->scripted.writes) {
        if (each.address == at_codes) order += each.mask == 0xF0 ? "b" : "a";
    }
    CHECK(order == "ba");
    co_return Result<void>{};
}

}  // namespace

TEST_CASE("lanes that share a monitor take turns") {
    SessionBench bench;
    bench.file.monitor.shared_by = {{0, 1}};
    CHECK(good(bench.run(reads_both_lanes)));
    CHECK(most_at_once == 1);
}

TEST_CASE("on a chip without a strobe the codes are read first and written in an allowed order") {
    SessionBench bench;
    bench.file.strobe = false;
    bench.file.forbidden = {{{{"a", 8, 15}, {"b", 0, 7}}, "overload"}};
    CHECK(good(bench.run(reads_unstrobed)));
}

TEST_CASE("a reading puts the codes and latches the edges in one batch") {
    SessionBench bench;
    CHECK(good(bench.run(reads_one_margin)));
}

TEST_CASE("the same reading comes about on a board that takes only small batches") {
    SessionBench bench;
    bench.scripted.most_operations = 16;
    bench.scripted.largest_payload = 64;
    REQUIRE(good(bench.run(saves_and_restores)));
    CHECK(bench.scripted.batches_begun > 6);
}

TEST_CASE("the chip's closed flag makes a closed reading whatever the counters hold") {
    SessionBench bench;
    CHECK(good(bench.run(reads_closed_eye)));
}

TEST_CASE("lock that does not come gives a reading without lock and ends the apply sequence") {
    SessionBench bench;
    CHECK(good(bench.run(reads_without_lock)));
}

TEST_CASE("what the monitor or the board file does not allow is refused before any write") {
    SessionBench bench;
    CHECK(good(bench.run(reads_what_cannot_be)));
}

TEST_CASE("a code that does not stick is not accepted and the strobe never comes") {
    SessionBench bench;
    CHECK(good(bench.run(code_that_does_not_stick)));
}

TEST_CASE("saved values are restored, other bits of the registers untouched, and bring-up works") {
    SessionBench bench;
    CHECK(good(bench.run(saves_and_restores)));
}

TEST_CASE("the check writes and reads scratch, puts it back, and moves nothing else") {
    SessionBench bench;
    CHECK(good(bench.run(checks_the_board)));
}

TEST_CASE("the check shows a bit that sticks") {
    SessionBench bench;
    CHECK(good(bench.run(checks_a_bad_bit)));
}

TEST_CASE("dwell and error ratio become exponents, rounded to the safe and the nearest side") {
    CHECK(dwell_log2_of(0) == 0);
    CHECK(dwell_log2_of(1) == 0);
    CHECK(dwell_log2_of(2) == 1);
    CHECK(dwell_log2_of(1024) == 10);
    CHECK(dwell_log2_of(1025) == 11);
    CHECK(dwell_log2_of(2500000000) == 32);
    CHECK(ratio_exponent_of(1e-6) == 6);
    CHECK(ratio_exponent_of(2e-6) == 6);
    CHECK(ratio_exponent_of(4e-6) == 5);
    CHECK(ratio_exponent_of(0) == 0);
    CHECK(dwelt_bits(small_board(), 2500000000) == std::uint64_t{1} << 32);
}
