#include <catch2/catch.hpp>

#include "sim_target/board/board.hpp"
#include "sim_target/board/wire_faults.hpp"

using namespace lanewright;
using namespace lanewright::sim;
using namespace std::chrono_literals;

namespace {

// Up is the ordinal, down the first code, left the dwell's exponent, right the error ratio's.
class PlainModel final : public LaneModel {
  public:
    void number(std::uint64_t ordinal, bool) override { ordinal_ = ordinal; }
    bool put(const std::vector<int>& codes, bool) override {
        first_code_ = codes[0];
        return first_code_ != 31;
    }
    bool fall_back(const std::vector<int>& codes) override { return put(codes, false); }
    LatchedEdges latch(const LookTime& time, double error_ratio, std::uint64_t bits) override {
        if (!time.has_lock) return {.closed = true};
        int exponent = 0;
        while ((std::uint64_t{1} << exponent) < bits) ++exponent;
        return {.up = static_cast<int>(ordinal_),
                .down = first_code_,
                .left = exponent,
                .right = static_cast<int>(error_ratio * 1e3 + 0.5),
                .closed = false};
    }
    CountedErrors count(const LookTime&, const MonitorPoint&, unsigned) override { return {}; }
    MonitorPoint origin() const override { return {}; }

  private:
    std::uint64_t ordinal_ = 0;
    int first_code_ = 0;
};

BoardSide small_side() {
    // Two lanes that share a monitor; addresses 10.. and 20.. hexadecimal.
    const char* text = R"({
      "lanes": {"count": 2, "base": "0x10", "stride": "0x10"},
      "registers": [
        {"name": "ID", "address": "0x00", "width": 32,
         "fields": [{"name": "chip", "bits": "31:0", "access": "read_only"}]},
        {"name": "KEY", "address": "0x01", "width": 8,
         "fields": [{"name": "code", "bits": "7:0", "access": "write_only"}]},
        {"name": "R1", "address": "0x00", "width": 16, "per_lane": true,
         "fields": [{"name": "code", "bits": "4:0", "role": "tuned", "access": "read_write"},
                    {"name": "trim", "bits": "11:8", "access": "read_write", "reset": 5}]},
        {"name": "REST", "address": "0x01", "width": 16, "per_lane": true,
         "fields": [{"name": "c1", "bits": "3:0", "role": "tuned", "access": "read_write"},
                    {"name": "r2", "bits": "7:4", "role": "tuned", "access": "read_write"},
                    {"name": "c2", "bits": "10:8", "role": "tuned", "access": "read_write"}]},
        {"name": "DO", "address": "0x02", "width": 8, "per_lane": true,
         "fields": [{"name": "load", "bits": "0", "role": "control", "access": "self_clearing"},
                    {"name": "go", "bits": "1", "role": "control", "access": "self_clearing"}]},
        {"name": "STATUS", "address": "0x03", "width": 8, "per_lane": true,
         "fields": [{"name": "busy", "bits": "0", "access": "read_only"},
                    {"name": "lock", "bits": "1", "access": "read_only"},
                    {"name": "closed", "bits": "2", "access": "read_only"}]},
        {"name": "DWELL", "address": "0x04", "width": 8, "per_lane": true,
         "fields": [{"name": "log2", "bits": "5:0", "role": "control", "access": "read_write", "reset": 20}]},
        {"name": "UP", "address": "0x05", "width": 8, "per_lane": true,
         "fields": [{"name": "steps", "bits": "3:0", "access": "read_only"}]},
        {"name": "DOWN", "address": "0x06", "width": 8, "per_lane": true,
         "fields": [{"name": "steps", "bits": "7:0", "access": "read_only"}]},
        {"name": "LEFT", "address": "0x07", "width": 8, "per_lane": true,
         "fields": [{"name": "steps", "bits": "7:0", "access": "read_only"}]},
        {"name": "RIGHT", "address": "0x08", "width": 8, "per_lane": true,
         "fields": [{"name": "steps", "bits": "7:0", "access": "read_only"}]}
      ]})";
    Complaints complaints;
    BoardSide side;
    const auto document = Document::parse(text, "board.json", complaints);
    REQUIRE(document);
    side.map = decode_register_map(document->root().object());
    INFO(complaints.text());
    REQUIRE_FALSE(complaints.any());
    const auto bind = [&side](Part part, const char* reg, const char* field) {
        side.binding.fields[static_cast<std::size_t>(part)] = FieldName{reg, field};
    };
    bind(Part::r1, "R1", "code");
    bind(Part::c1, "REST", "c1");
    bind(Part::r2, "REST", "r2");
    bind(Part::c2, "REST", "c2");
    bind(Part::strobe, "DO", "load");
    bind(Part::trigger, "DO", "go");
    bind(Part::busy, "STATUS", "busy");
    bind(Part::lock, "STATUS", "lock");
    bind(Part::closed, "STATUS", "closed");
    bind(Part::dwell_log2, "DWELL", "log2");
    bind(Part::up, "UP", "steps");
    bind(Part::down, "DOWN", "steps");
    bind(Part::left, "LEFT", "steps");
    bind(Part::right, "RIGHT", "steps");
    side.binding.shared_by = {{0, 1}};
    side.binding.fixed[{"ID", "chip"}] = 0xCAFE;
    side.wire.lock_us = 1000;
    side.wire.limits.sessions = 2;
    side.declared = true;
    return side;
}

std::vector<std::unique_ptr<LaneModel>> plain_models() {
    std::vector<std::unique_ptr<LaneModel>> models;
    for (int lane = 0; lane < 2; ++lane) models.push_back(std::make_unique<PlainModel>());
    return models;
}

// At 1 Mb/s, a dwell of 2^20 bits takes 1.05 s.
ChipOptions slow_chip() {
    return {.time_scale = 1,
            .bit_rate_hz = 1e6,
            .reset_codes = {3, 1, 2, 1},
            .temperature_c = 25,
            .chip = {}};
}

struct ChipBench {
    boost::asio::io_context io;
    VirtualTimeSource time{io};
    Chip chip{time, small_side(), slow_chip(), plain_models()};

    std::uint32_t read(std::uint32_t address) {
        std::uint32_t value = 0;
        REQUIRE(chip.registers().read(address, value) == sim::Outcome::done);
        return value;
    }
    void write(std::uint32_t address, std::uint32_t value) {
        REQUIRE(chip.registers().write(address, std::nullopt, value) == sim::Outcome::done);
    }
    void pass(std::chrono::nanoseconds span) { run_until_done(time, sleep(time, span)); }
    static Task<void> sleep(TimeSource& source, std::chrono::nanoseconds span) {
        co_await source.sleep_until(source.now() + span);
        co_return Result<void>{};
    }
};

class RecordingPort final : public Port {
  public:
    void send(Octets payload) override { sent.push_back(std::move(payload)); }
    std::vector<Octets> sent;
};

struct BoardBench {
    boost::asio::io_context io;
    VirtualTimeSource time{io};
    sim::Board board;
    std::shared_ptr<RecordingPort> port = std::make_shared<RecordingPort>();

    explicit BoardBench(const BoardSide& side = small_side())
        : board(time, side, slow_chip(), plain_models(), 9) {}
    ~BoardBench() { run_until_done(time, board.stop()); }

    void hello(std::uint32_t session, std::shared_ptr<RecordingPort> on = nullptr) {
        Writer writer;
        writer.octet(1);
        writer.octet(0);
        writer.octet(1);
        writer.four(session);
        REQUIRE(board.received(on ? on : port, writer.take(), 0));
    }
    void batch(std::uint32_t session, unsigned slot, unsigned count, const Octets& operations,
               std::uint32_t boot = 9, std::shared_ptr<RecordingPort> on = nullptr) {
        Writer writer;
        writer.octet(2);
        writer.varint(slot);
        writer.two(static_cast<std::uint16_t>(count));
        writer.two(static_cast<std::uint16_t>(session));
        writer.varint(boot);
        writer.append(operations);
        REQUIRE(board.received(on ? on : port, writer.take(), 0));
    }
    void pass(std::chrono::nanoseconds span) { run_until_done(time, ChipBench::sleep(time, span)); }
    // The outcome or error of the last answer: its byte behind slot, count, tag and boot.
    int last() const { return port->sent.back().at(7); }
};

const Octets read_id = {0x00};
const Octets start_reading = {0x11, 0x24, 0x02};  // write address 12 hexadecimal
const Octets wait_for_idle = {0x33, 0x26, 0x01, 0x00, 0x80, 0x89, 0x7A};  // address 13, bit 0, 2 s

}  // namespace

TEST_CASE("Registers keep their access rules, widths and reset values") {
    ChipBench bench;
    RegisterFile& registers = bench.chip.registers();
    std::uint32_t value = 0;
    CHECK(bench.read(0x00) == 0xCAFE);
    CHECK(bench.read(0x10) == (5u << 8 | 3u));
    CHECK(registers.write(0x00, std::nullopt, 1) == sim::Outcome::no_access);
    CHECK(registers.read(0x01, value) == sim::Outcome::no_access);
    CHECK(registers.read(0x77, value) == sim::Outcome::no_register);
    CHECK(registers.write(0x77, std::nullopt, 1) == sim::Outcome::no_register);
    CHECK(registers.write(0x10, std::nullopt, 0x10000) == sim::Outcome::beyond_width);
    CHECK(registers.write(0x10, 0x1Fu, 9) == sim::Outcome::done);
    CHECK(bench.read(0x10) == (5u << 8 | 9u));
    CHECK(bench.read(0x20) == (5u << 8 | 3u));
    // All of it is read-only.
    CHECK(registers.write(0x13, std::nullopt, 0xFF) == sim::Outcome::no_access);
    CHECK(bench.read(0x12) == 0);
    bench.chip.reset();
    CHECK(bench.read(0x10) == (5u << 8 | 3u));
}

TEST_CASE("Codes take effect with the strobe, and lock comes back after its time") {
    ChipBench bench;
    bench.pass(2ms);
    CHECK((bench.read(0x13) & 2u) != 0);
    bench.write(0x10, 7);
    CHECK((bench.read(0x13) & 2u) != 0);
    bench.write(0x12, 1);
    CHECK((bench.read(0x13) & 2u) == 0);
    bench.pass(1ms);
    CHECK((bench.read(0x13) & 2u) != 0);
    bench.write(0x10, 31);
    bench.write(0x12, 1);
    bench.pass(10ms);
    CHECK((bench.read(0x13) & 2u) == 0);
}

TEST_CASE("A reading appears after its dwell and is held in its fields") {
    ChipBench bench;
    bench.pass(2ms);
    bench.write(0x14, 18);
    bench.write(0x12, 2);
    CHECK((bench.read(0x13) & 1u) == 1);
    CHECK(bench.read(0x16) == 0);
    CHECK(bench.chip.next_change() - bench.time.now() == 262144us);
    bench.pass(262144us);
    CHECK((bench.read(0x13) & 1u) == 0);
    CHECK(bench.read(0x15) == 1);
    CHECK(bench.read(0x16) == 3);
    CHECK(bench.read(0x17) == 18);
    for (int i = 0; i < 20; ++i) {
        bench.write(0x12, 2);
        bench.pass(1s);
    }
    CHECK(bench.read(0x15) == 15);  // 21 readings do not fit into four bits
}

TEST_CASE("A trigger does nothing while the shared monitor works for the other lane") {
    ChipBench bench;
    bench.pass(2ms);
    bench.write(0x12, 2);
    CHECK((bench.read(0x23) & 1u) == 1);
    bench.write(0x22, 2);
    bench.pass(2s);
    CHECK(bench.read(0x15) == 1);
    CHECK(bench.read(0x25) == 0);
    bench.write(0x22, 2);
    bench.pass(2s);
    CHECK(bench.read(0x25) == 1);
}

TEST_CASE("A repeated batch is answered from memory and carried out once") {
    BoardBench bench;
    bench.hello(77);
    bench.pass(2ms);
    Octets both = start_reading;
    // Wait at the next address, 13 hexadecimal, until bit 0 is 0, for at most 2 s.
    both.insert(both.end(), {0x2B, 0x01, 0x00, 0x80, 0x89, 0x7A});
    bench.batch(77, 0, 1, both);
    bench.batch(77, 0, 1, both);  // still being carried out: no answer, not started twice
    bench.batch(77, 1, 1, read_id);
    bench.pass(1ms);
    REQUIRE(bench.port->sent.size() == 2);  // the waiting batch holds up no other
    bench.pass(2s);
    REQUIRE(bench.port->sent.size() == 3);
    CHECK(bench.last() == 0);
    bench.batch(77, 0, 1, both);
    bench.pass(2s);
    REQUIRE(bench.port->sent.size() == 4);
    CHECK(bench.port->sent[3] == bench.port->sent[2]);
    bench.batch(77, 0, 2, {0x10, 0x2A});  // read the reading's number, address 15 hexadecimal
    bench.pass(1ms);
    CHECK(bench.port->sent.back().back() == 1);
}

TEST_CASE("Batches that may not begin are refused with the reason, in the stated order") {
    BoardBench bench;
    bench.batch(77, 0, 1, read_id);
    CHECK(bench.last() == 2);  // no session
    bench.batch(77, 0, 1, read_id, 8);
    CHECK(bench.last() == 1);  // the boot number comes first
    bench.hello(77);
    bench.batch(78, 0, 1, read_id);
    CHECK(bench.last() == 2);
    bench.batch(77, 0, 1, {0x07});
    CHECK(bench.last() == 3);
    bench.batch(77, 16, 1, read_id);
    CHECK(bench.last() == 4);
    bench.batch(77, 0, 0, read_id);
    CHECK(bench.last() == 6);
    bench.batch(77, 0, 5, wait_for_idle);
    bench.batch(77, 1, 1, {0x04, 0x80, 0x89, 0x7A});
    bench.pass(1ms);
    bench.batch(77, 1, 2, read_id);
    CHECK(bench.last() == 5);
    bench.batch(77, 0, 4, read_id);
    CHECK(bench.last() == 6);
}

TEST_CASE("A failed operation ends its batch and says which") {
    BoardBench bench;
    bench.hello(77);
    bench.batch(77, 0, 1, {0x00, 0x10, 0xC8, 0x01, 0x00});  // a good read, one of nothing, another
    bench.pass(1ms);
    CHECK(bench.last() == 1);
    CHECK(bench.port->sent.back().at(8) == 1);
    // A write and check of a bit that is not there.
    bench.batch(77, 0, 2, {0x32, 0x20, 0x20, 0x20});
    bench.pass(1ms);
    CHECK(bench.last() == 5);
    // A wait for busy that never comes.
    bench.batch(77, 0, 3, {0x33, 0x26, 0x01, 0x01, 0x64});
    bench.pass(1ms);
    CHECK(bench.last() == 4);
    CHECK(bench.port->sent.back().back() == 0);
}

TEST_CASE("A reset in mid-batch leaves it unanswered, changes the boot number, forgets sessions") {
    BoardSide side = small_side();
    side.faults.reset_at_batches = {2};
    BoardBench bench(side);
    bench.hello(77);
    bench.batch(77, 0, 1, read_id);
    bench.pass(1ms);
    bench.batch(77, 0, 2, {0x31, 0x20, 0x1F, 0x09, 0x33, 0x06, 0x01, 0x01, 0x64});
    bench.pass(1s);
    REQUIRE(bench.port->sent.size() == 2);
    CHECK(bench.board.boot() == 10);
    bench.batch(77, 0, 2, read_id);
    CHECK(bench.last() == 1);
    bench.batch(77, 0, 2, read_id, 10);
    CHECK(bench.last() == 2);
    bench.hello(77);
    CHECK(bench.port->sent.back().at(8) == 0);  // not resumed
    bench.batch(77, 0, 1, {0x10, 0x20}, 10);
    bench.pass(1ms);
    CHECK(bench.port->sent.back().back() == 10);  // the high byte of 5·256 + 3, as a varint
}

TEST_CASE("A session moves to the link of its last hello, and the oldest idle one is forgotten") {
    BoardBench bench;
    const auto other = std::make_shared<RecordingPort>();
    bench.hello(77);
    bench.hello(77, other);
    CHECK(other->sent.back().at(8) == 1);  // resumed
    bench.batch(77, 0, 1, read_id);
    CHECK(bench.last() == 2);
    bench.batch(77, 0, 1, read_id, 9, other);
    bench.pass(1ms);
    CHECK(other->sent.back().at(7) == 0);
    bench.hello(78);  // two sessions, as many as there may be
    bench.board.port_gone(*other);
    bench.hello(79, std::make_shared<RecordingPort>());
    bench.hello(78);
    CHECK(bench.port->sent.back().at(8) == 1);
    bench.hello(77, other);
    CHECK(other->sent.back().at(8) == 0);
}

TEST_CASE("Wire faults strike as often as asked, repeatably, in their direction only") {
    FaultOptions options;
    options.seed = 5;
    options.flip = {.probability = 0.1, .direction = Direction::to_host};
    options.twice = {.probability = 0.2, .direction = Direction::both};
    options.late = {.probability = 0.05, .direction = Direction::to_board};
    const auto count = [&options](Direction direction) {
        WireFaults faults(options);
        const Octets frame = {5, 1, 2, 3, 4, 0};
        std::array<int, 3> seen{};
        for (int i = 0; i < 10000; ++i) {
            const auto pieces = faults.pass(frame, direction);
            seen[0] += pieces.front().bytes != frame ? 1 : 0;
            seen[1] += pieces.size() == 2 ? 1 : 0;
            seen[2] += pieces.front().delay > 0ns ? 1 : 0;
        }
        return seen;
    };
    const auto host = count(Direction::to_host), board = count(Direction::to_board);
    // Five standard deviations of a binomial count on either side.
    CHECK(std::abs(host[0] - 1000) < 150);
    CHECK(std::abs(host[1] - 2000) < 200);
    CHECK(host[2] == 0);
    CHECK(board[0] == 0);
    CHECK(std::abs(board[2] - 500) < 110);
    CHECK(count(Direction::to_host) == host);
}
