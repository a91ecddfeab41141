// Readings held against their own wire records: as recorded nothing differs, and each thing that is
// altered is found where it is.

#include <boost/asio/io_context.hpp>
#include <catch2/catch.hpp>

#include "daemon/replay/reading_check.hpp"
#include "daemon/replay/strict.hpp"
#include "daemon/store/store_error.hpp"
#include "drivers/board/board_reader.hpp"
#include "tests/daemon/bench_fixture.hpp"
#include "tests/daemon/table_registers.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

BoardFile board_named(const std::string& name) {
    Complaints complaints;
    auto board =
        load_board_file(LANEWRIGHT_SOURCE_DIR "/configs/boards/" + name + ".json", complaints);
    if (!board) throw std::runtime_error(complaints.text());
    return std::move(*board);
}

Request margin_request() {
    Request request;
    request.codes = {{9, 15, 7, 2}};
    request.what = MarginWanted{1e-6, std::uint64_t{1} << 31, {}};
    return request;
}

// One board, and readings of its lane 0 with their records.
class Readings {
  public:
    explicit Readings(BoardFile file)
        : board(std::move(file)), map(board), time(io), reader(board, map, registers, time) {
        registers.value[0x10B] = 21;  // MON_UP, DOWN, LEFT, RIGHT of the demo board
        registers.value[0x10C] = 19;
        registers.value[0x10D] = 20;
        registers.value[0x10E] = 22;
    }

    ReadingTaken take(const Request& request, std::uint32_t ordinal = 3) {
        auto reading = run_until_done(time, reader.read(Lane{0}, request, ordinal));
        if (!reading) throw FaultError(reading.error());
        return {Lane{0}, ordinal, 0, std::move(reading->reading), std::move(reading->wire)};
    }

    std::optional<ReadingDifference> check(const Request& request, const ReadingTaken& taken,
                                           std::optional<Codes> standing = {}) {
        return ReadingCheck(board, map, time, 1).check(request, taken, standing);
    }

    BoardFile board;
    RegisterMap map;
    boost::asio::io_context io;
    VirtualTimeSource time;
    TableRegisters registers;
    BoardReader reader;
};

std::size_t operation_at(const ReadingTaken& taken, std::uint32_t address) {
    for (std::size_t i = 0; i < taken.wire.size(); ++i) {
        if (taken.wire[i].address == address && taken.wire[i].kind == WireOperation::Kind::read)
            return i;
    }
    FAIL("no such operation");
    return 0;
}

}  // namespace

TEST_CASE("A latched reading follows from its own record, locked or not") {
    Readings bench(demo_board());
    const ReadingTaken taken = bench.take(margin_request());
    CHECK(taken.reading.up_mv->value == 42);  // 21 steps of 2 mV
    CHECK_FALSE(bench.check(margin_request(), taken));
    bench.registers.locks = false;
    const ReadingTaken unlocked = bench.take(margin_request());
    CHECK(unlocked.reading.status == Status::no_lock);
    CHECK_FALSE(bench.check(margin_request(), unlocked));
}

TEST_CASE("An altered step count is found at its operation with the value it should have") {
    Readings bench(demo_board());
    const ReadingTaken taken = bench.take(margin_request());
    struct Altered {
        std::uint32_t address;
        const char* reg;
        const char* expected;
        const char* found;
    };
    for (const Altered& each : {Altered{0x10B, "MON_UP.steps", "0x15", "0x16"},
                                Altered{0x10C, "MON_DOWN.steps", "0x13", "0x14"},
                                Altered{0x10D, "MON_LEFT.steps", "0x14", "0x15"},
                                Altered{0x10E, "MON_RIGHT.steps", "0x16", "0x17"}}) {
        ReadingTaken altered = taken;
        const std::size_t at = operation_at(altered, each.address);
        ++altered.wire[at].result;
        const auto difference = bench.check(margin_request(), altered);
        REQUIRE(difference);
        CHECK(difference->operation == at);
        CHECK(difference->reg == each.reg);
        CHECK(difference->expected == each.expected);
        CHECK(difference->found == each.found);
    }
}

TEST_CASE("Whatever else of a record is altered is found at its operation") {
    Readings bench(demo_board());
    const ReadingTaken taken = bench.take(margin_request());
    for (std::size_t i = 0; i < taken.wire.size(); ++i) {
        using Member = std::uint32_t WireOperation::*;
        for (const Member member :
             {&WireOperation::address, &WireOperation::mask, &WireOperation::value}) {
            ReadingTaken altered = taken;
            altered.wire[i].*member ^= 1;
            const auto difference = bench.check(margin_request(), altered);
            INFO("operation " << i);
            REQUIRE(difference);
            CHECK(difference->operation == i);
            CHECK_FALSE(difference->expected.empty());
            CHECK_FALSE(difference->found.empty());
        }
        if (taken.wire[i].read_back || taken.wire[i].kind == WireOperation::Kind::wait_until) {
            ReadingTaken altered = taken;
            altered.wire[i].result ^= taken.wire[i].mask & (~taken.wire[i].mask + 1);
            const auto difference = bench.check(margin_request(), altered);
            REQUIRE(difference);
            CHECK(difference->operation == i);
        }
    }
    ReadingTaken cut = taken;
    cut.wire.pop_back();
    REQUIRE(bench.check(margin_request(), cut));
    CHECK(bench.check(margin_request(), cut)->operation == cut.wire.size());
    ReadingTaken longer = taken;
    longer.wire.push_back(taken.wire.back());
    REQUIRE(bench.check(margin_request(), longer));
    CHECK(bench.check(margin_request(), longer)->operation == taken.wire.size());
}

TEST_CASE("An altered stored margin is found with the value that the record gives") {
    Readings bench(demo_board());
    ReadingTaken taken = bench.take(margin_request());
    taken.reading.left_ui->value += 0.001;  // no whole number of steps
    const auto difference = bench.check(margin_request(), taken);
    REQUIRE(difference);
    CHECK_THAT(difference->what, Catch::Contains("left_ui"));
    CHECK(difference->expected == "0.3125");  // 20 steps of 1/64 UI
    CHECK(difference->operation == operation_at(taken, 0x10D));
    ReadingTaken charged = bench.take(margin_request());
    charged.reading.cost_s *= 2;
    REQUIRE(bench.check(margin_request(), charged));
    CHECK_THAT(bench.check(margin_request(), charged)->what, Catch::Contains("cost_s"));
}

TEST_CASE("A counted reading follows from its record and an altered count is found") {
    Readings bench(board_named("demo_counted"));
    Request request = margin_request();
    request.what = MarginWanted{1e-4, std::uint64_t{1} << 28, {}};
    const ReadingTaken taken = bench.take(request);
    REQUIRE(taken.reading.counts.size() >= 4);
    CHECK_FALSE(bench.check(request, taken));
    std::size_t tried = 0;
    for (std::size_t i = 0; i < taken.wire.size(); ++i) {
        if (taken.wire[i].address != TableRegisters::errors) continue;
        if (++tried > 3) break;
        ReadingTaken altered = taken;
        altered.wire[i].result ^= 1;
        const auto difference = bench.check(request, altered);
        REQUIRE(difference);
        // Another count may send the next look elsewhere: then the record parts behind it.
        REQUIRE(difference->operation);
        CHECK(*difference->operation >= i);
    }
    CHECK(tried > 0);
    ReadingTaken altered = taken;
    ++altered.reading.counts.back().errors;
    const auto difference = bench.check(request, altered);
    REQUIRE(difference);
    CHECK(difference->reg == "MON_ERRORS.count");
    REQUIRE(difference->operation);
    CHECK(taken.wire[*difference->operation].address == TableRegisters::errors);
}

TEST_CASE("A chip that takes each code as it is written is replayed from the codes before") {
    BoardFile board = demo_board();
    board.strobe = false;
    Readings bench(board);
    const Codes before{{28, 2, 3, 3}};
    const std::uint32_t first = TableRegisters::base;
    bench.registers.value[first] = 28;  // EQ_R1, C1, R2, C2 by address
    bench.registers.value[first + 1] = 3;
    bench.registers.value[first + 2] = 2;
    bench.registers.value[first + 3] = 3;
    const ReadingTaken taken = bench.take(margin_request());
    CHECK_FALSE(bench.check(margin_request(), taken, before));
}

TEST_CASE("A sentinel's operations in a record are checked by themselves") {
    BoardFile board = demo_board();
    board.sentinel = FieldName{"SENTINEL", "value"};
    if (board.map.find(*board.sentinel) == nullptr) FAIL("the demo board has no sentinel field");
    Readings bench(board);
    const ReadingTaken planted = bench.take(margin_request());
    const ReadingTaken standing = bench.take(margin_request(), 4);
    CHECK(planted.wire.size() == standing.wire.size() + 1);
    CHECK_FALSE(bench.check(margin_request(), planted));
    CHECK_FALSE(bench.check(margin_request(), standing));
    ReadingTaken altered = standing;
    altered.wire.back().result ^= 4;
    REQUIRE(bench.check(margin_request(), altered));
    CHECK(bench.check(margin_request(), altered)->reg == "SENTINEL.value");
}

TEST_CASE("A run whose copies of files were altered, or that was imported, is not replayed") {
    Manifest manifest;
    manifest.run = "20261201T000000-00000000";
    manifest.board_file = {"board.json", sha256_hex("x"), "y"};
    manifest.recipe_file = {"recipe.json", sha256_hex("x"), "x"};
    CHECK_THROWS_WITH(replay_strictly(manifest, {}), Catch::Contains("board.json"));
    manifest.imported.emplace();
    CHECK_THROWS_WITH(replay_strictly(manifest, {}), Catch::Contains("imported"));
}
