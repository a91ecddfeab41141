// The session over a cable that loses, delays, doubles and alters, with a board that falls silent
// or is reset. Virtual time.

#include <catch2/catch.hpp>
#include <random>

#include "drivers/io/task_group.hpp"
#include "session_bench.hpp"

using namespace lanewright;
using namespace lanewright::test;
using std::chrono::milliseconds;

namespace {

// Counts writes to one address.
std::size_t writes_to(const SessionBench& bench, std::uint32_t address) {
    std::size_t count = 0;
    for (const DoneWrite& each : bench.scripted.writes) count += each.address == address ? 1 : 0;
    return count;
}

MemoryHook lose_first(int& count) {
    return [&count](Bytes bytes) -> std::vector<MemoryPiece> {
        if (count-- > 0) return {};
        return {{std::move(bytes), {}}};
    };
}

Task<void> one_strobe(SessionBench* bench) {
    Result<BatchReply> reply =
        co_await bench->registers().run(Lane{0}, bench->strobes(), bench->soon());
    if (!reply) co_return reply.error();
    co_return Result<void>{};
}

// Not inside the coroutines: this compiler destroys aggregates made there within a co_await twice.
Batch reads_scratch(const SessionBench& bench) {
    return bench.reads({"SCRATCH", "value"});
}
Batch reads_note_of_lane_1(const SessionBench& bench) {
    return bench.reads({"NOTE", "value"}, Lane{1});
}

// The transaction's number is written and read back, with a strobe in every third.
Batch transaction(const SessionBench& bench, std::uint32_t i) {
    Batch batch = bench.writes_note(i);
    if (i % 3 == 0) {
        REQUIRE(good(bench.map.write_declared(batch, Lane{0}, {"LOAD", "strobe"}, 1)));
    }
    REQUIRE(good(bench.map.read(batch, Lane{0}, {"NOTE", "value"})));
    return batch;
}

Batch waits_half_a_second(const SessionBench& bench) {
    Batch batch;
    REQUIRE(good(bench.map.wait_until(batch, Lane{1}, {"MONITOR", "busy"}, 1,
                                      std::chrono::microseconds(500000))));
    return batch;
}

Task<void> one_read(SessionBench* bench) {
    Result<BatchReply> reply =
        co_await bench->registers().run(Lane{0}, reads_scratch(*bench), bench->soon());
    if (!reply) co_return reply.error();
    CHECK(reply->results.at(0) == bench->scripted.registers[at_scratch]);
    co_return Result<void>{};
}

int to_lose = 0;

Task<void> strobe_with_lost_request(SessionBench* bench) {
    to_lose = 2;
    bench->pair.cable->on_host_writes(lose_first(to_lose));
    co_return co_await one_strobe(bench);
}

Task<void> strobe_with_lost_replies(SessionBench* bench) {
    to_lose = 3;
    bench->pair.cable->on_board_writes(lose_first(to_lose));
    co_return co_await one_strobe(bench);
}

Task<void> strobe_on_silent_board(SessionBench* bench) {
    bench->scripted.silent = true;
    co_return co_await one_strobe(bench);
}

Task<void> read_on_silent_board(SessionBench* bench) {
    bench->scripted.silent = true;
    co_return co_await one_read(bench);
}

}  // namespace

TEST_CASE("opening greets the board, reads its identity, and then batches go through") {
    SessionBench bench;
    CHECK(good(bench.run(one_read)));
    CHECK(bench.scripted.hellos == 1);
    CHECK(bench.last_statistics.retries == 0);
    CHECK(bench.last_statistics.bad_frames == 0);
    CHECK(bench.last_statistics.frames == 6);
}

TEST_CASE("the wrong board is refused before anything else is asked of it") {
    SessionBench bench;
    bench.scripted.registers[at_id] = 0x4321;
    const Result<void> outcome = bench.run(one_strobe);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::wrong_board);
    CHECK(outcome.error().what ==
          "this is another board: chip is 0x4321, the board file expects 0x1234");
    CHECK(bench.scripted.batches_begun == 1);
    CHECK(bench.scripted.writes.empty());
}

TEST_CASE("a board that never answers is a timeout at opening, after bounded time") {
    SessionBench bench;
    bench.scripted.silent = true;
    const TimePoint began = bench.time.now();
    const Result<void> outcome = bench.run(one_read);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::timeout);
    CHECK(outcome.error().hint == "Check power, cable, and the link in the board file");
    CHECK(bench.time.now() - began < std::chrono::seconds(2));
}

TEST_CASE("nobody at the other end is unreachable at once") {
    SessionBench bench;
    bench.pair.cable->unplug();
    const Result<void> outcome = bench.run(one_read);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::unreachable);
}

TEST_CASE("a lost request is asked again and carried out once") {
    SessionBench bench;
    CHECK(good(bench.run(strobe_with_lost_request)));
    CHECK(writes_to(bench, at_load) == 1);
    CHECK(bench.last_statistics.retries == 2);
}

TEST_CASE("lost replies are asked for again and the batch is carried out once") {
    SessionBench bench;
    CHECK(good(bench.run(strobe_with_lost_replies)));
    CHECK(writes_to(bench, at_load) == 1);
    CHECK(bench.scripted.repeats == 3);
    CHECK(bench.last_statistics.retries == 3);
}

TEST_CASE(
    "on a silent board a read times out, a strobe's outcome is unknown, and it is sent no more") {
    SessionBench read_bench;
    const Result<void> read = read_bench.run(read_on_silent_board);
    REQUIRE(!read);
    CHECK(read.error().cause == Cause::timeout);
    CHECK(read.error().attempt == 4);
    CHECK(read.error().attempts == 4);
    CHECK(read.error().board == "small");
    CHECK(read.error().lane == Lane{0});
    CHECK(read.error().waited >= milliseconds(200));
    CHECK(!read.error().sent_hex.empty());

    SessionBench bench;
    const Result<void> strobe = bench.run(strobe_on_silent_board);
    REQUIRE(!strobe);
    CHECK(strobe.error().cause == Cause::outcome_unknown);
    CHECK(writes_to(bench, at_load) == 1);
}

namespace {

Task<void> plug_in_later(SessionBench* bench) {
    co_await bench->time.sleep_until(bench->time.now() + milliseconds(1500));
    bench->pair.cable->plug_in();
    co_return Result<void>{};
}

Task<void> cut_in_mid_strobe(SessionBench* bench) {
    // The board gets it, then the link goes before the answer can arrive.
    bench->scripted.on_write = [bench](const DoneWrite&) {
        bench->scripted.on_write = nullptr;
        bench->pair.cable->unplug();
    };
    TaskGroup helper(bench->io);
    helper.spawn("plug in", plug_in_later(bench));
    Result<void> outcome = co_await one_strobe(bench);
    const Result<void> joined = co_await helper.join();
    co_return outcome;
}

Task<void> cut_and_forgotten(SessionBench* bench) {
    bench->scripted.forgets = true;
    co_return co_await cut_in_mid_strobe(bench);
}

Task<void> unplugged_for_good(SessionBench* bench) {
    bench->pair.cable->unplug();
    co_return co_await one_read(bench);
}

Task<void> unplugged_for_a_while(SessionBench* bench) {
    TaskGroup helper(bench->io);
    bench->pair.cable->unplug();
    helper.spawn("plug in", plug_in_later(bench));
    Result<void> outcome = co_await one_read(bench);
    const Result<void> joined = co_await helper.join();
    co_return outcome;
}

}  // namespace

TEST_CASE("a cable cut in mid-batch is reconnected and the reply comes from the board's memory") {
    SessionBench bench;
    CHECK(good(bench.run(cut_in_mid_strobe)));
    CHECK(writes_to(bench, at_load) == 1);
    CHECK(bench.scripted.repeats == 1);
    CHECK(bench.last_statistics.reconnects >= 1);
}

TEST_CASE("when the board forgot the session an unrepeatable batch has an unknown outcome") {
    SessionBench bench;
    const Result<void> outcome = bench.run(cut_and_forgotten);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::outcome_unknown);
    CHECK(writes_to(bench, at_load) == 1);
}

TEST_CASE("a cable that comes back within patience is waited for, one that does not is not") {
    SessionBench back;
    CHECK(good(back.run(unplugged_for_a_while)));
    CHECK(back.last_statistics.reconnects >= 1);

    SessionBench gone;
    const TimePoint began = gone.time.now();
    const Result<void> outcome = gone.run(unplugged_for_good);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::unreachable);
    CHECK(gone.time.now() - began >= std::chrono::seconds(3));
    CHECK(gone.time.now() - began < std::chrono::seconds(5));
}

namespace {

Task<void> reset_in_mid_batch(SessionBench* bench) {
    bench->scripted.on_write = [bench](const DoneWrite&) {
        bench->scripted.on_write = nullptr;
        bench->scripted.reset();
    };
    Result<BatchReply> strobe =
        co_await bench->registers().run(Lane{0}, bench->strobes(), bench->soon());
    CHECK((!strobe && strobe.error().cause == Cause::board_reset));
    // The other lane had nothing under way and hears of it as well, once.
    const Batch read = reads_note_of_lane_1(*bench);
    Result<BatchReply> other = co_await bench->registers().run(Lane{1}, read, bench->soon());
    CHECK(good(other));  // first batch of that lane: it knows of no time before
    co_return co_await one_read(bench);
}

Task<void> reset_between_batches(SessionBench* bench) {
    const Batch read = reads_note_of_lane_1(*bench);
    Result<BatchReply> before = co_await bench->registers().run(Lane{1}, read, bench->soon());
    CHECK(good(before));
    bench->scripted.reset();
    Result<BatchReply> hit =
        co_await bench->registers().run(Lane{0}, bench->strobes(), bench->soon());
    CHECK((!hit && hit.error().cause == Cause::board_reset));
    Result<BatchReply> told = co_await bench->registers().run(Lane{1}, read, bench->soon());
    CHECK((!told && told.error().cause == Cause::board_reset));
    Result<BatchReply> after = co_await bench->registers().run(Lane{1}, read, bench->soon());
    CHECK(good(after));
    co_return Result<void>{};
}

}  // namespace

TEST_CASE("a reset in mid-batch fails the batch, is counted, and the board is found again") {
    SessionBench bench;
    CHECK(good(bench.run(reset_in_mid_batch)));
    CHECK(bench.last_statistics.resets == 1);
    CHECK(writes_to(bench, at_load) == 1);
}

TEST_CASE("each lane hears of a reset exactly once, and nothing is carried out before that") {
    SessionBench bench;
    CHECK(good(bench.run(reset_between_batches)));
    CHECK(writes_to(bench, at_load) == 0);
    CHECK(bench.last_statistics.resets == 1);
}

namespace {

// Flips, cuts, doubles or delays one frame in `one_in`, in both directions.
MemoryHook unkind(std::mt19937& random, unsigned one_in) {
    return [&random, one_in](Bytes bytes) -> std::vector<MemoryPiece> {
        if (bytes.empty() || random() % one_in != 0) return {{std::move(bytes), {}}};
        switch (random() % 5) {
            case 0:
                bytes[random() % bytes.size()] ^= static_cast<std::byte>(1u << random() % 8);
                break;
            case 1:
                bytes.resize(random() % bytes.size());
                break;
            case 2:
                return {{bytes, {}}, {bytes, milliseconds(random() % 3)}};
            case 3:
                return {{bytes, milliseconds(random() % 400)}};
            default:
                return {};
        }
        return {{std::move(bytes), {}}};
    };
}

std::mt19937 trouble(1);
constexpr std::uint32_t transactions = 2000;

// Writes a running number and reads it back; now and then a strobe, which must happen once.
Task<void> many_transactions(SessionBench* bench) {
    bench->pair.cable->on_host_writes(unkind(trouble, 20));
    bench->pair.cable->on_board_writes(unkind(trouble, 20));
    std::size_t strobes = 0;
    for (std::uint32_t i = 1; i <= transactions; ++i) {
        const Batch batch = transaction(*bench, i);
        const bool strobe = !batch.repeatable();
        Result<BatchReply> reply = co_await bench->registers().run(Lane{0}, batch, bench->soon());
        if (!reply) co_return reply.error();
        if (reply->results.at(0) != i || reply->results.back() != i) {
            FAIL("a wrong value was accepted in transaction " << i);
        }
        strobes += strobe ? 1 : 0;
        if (writes_to(*bench, at_load) != strobes) FAIL("a strobe was lost or doubled at " << i);
    }
    co_return Result<void>{};
}

}  // namespace

TEST_CASE("2,000 transactions over an unkind cable give the right values, each write done once") {
    for (const unsigned seed : {1u, 2u, 3u}) {
        trouble.seed(seed);
        SessionBench bench;
        bench.file.dialect.attempts = 8;
        INFO("seed " << seed);
        CHECK(good(bench.run(many_transactions)));
        CHECK(bench.last_statistics.retries > 50);
        CHECK(bench.last_statistics.bad_frames > 5);
        CHECK(bench.last_statistics.resets == 0);
    }
}

namespace {

Task<void> read_beside_console(SessionBench* bench) {
    bench->scripted.say("\r\nkernel: something happened\r\n");
    co_await bench->time.sleep_until(bench->time.now() + milliseconds(5));
    co_return co_await one_read(bench);
}

Task<void> babble(SessionBench* bench, int times) {
    for (int i = 0; i < times; ++i) {
        bench->scripted.say(std::string("\x55\x00\xAA garbage \x00\x01", 14));
        co_await bench->time.sleep_until(bench->time.now() + milliseconds(7));
    }
    co_return Result<void>{};
}

Task<void> garbage_only(SessionBench* bench) {
    bench->scripted.silent = true;
    TaskGroup helper(bench->io);
    helper.spawn("babble", babble(bench, 200));
    Result<void> outcome = co_await one_read(bench);
    const Result<void> joined = co_await helper.join();
    co_return outcome;
}

}  // namespace

TEST_CASE("a console that prints on the line costs a retry at most and gives no wrong value") {
    SessionBench bench;
    CHECK(good(bench.run(read_beside_console)));
    CHECK(bench.last_statistics.bad_frames == 1);
    CHECK(bench.last_statistics.retries <= 1);
}

TEST_CASE("a board that answers garbage is a timeout and the garbage is counted") {
    SessionBench bench;
    const Result<void> outcome = bench.run(garbage_only);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::timeout);
    CHECK(bench.last_statistics.bad_frames >= 20);
}

namespace {

Task<void> long_wait(SessionBench* bench, TimePoint* ended) {
    const Batch batch = waits_half_a_second(*bench);
    Result<BatchReply> reply = co_await bench->registers().run(Lane{1}, batch, bench->soon());
    CHECK((reply && reply->outcome == Outcome::wait_expired));
    *ended = bench->time.now();
    co_return Result<void>{};
}

Task<void> short_beside_long(SessionBench* bench) {
    TimePoint ended{};
    TaskGroup helper(bench->io);
    helper.spawn("long wait", long_wait(bench, &ended));
    for (int i = 0; i < 50; ++i) {
        Result<void> read = co_await one_read(bench);
        CHECK(good(read));
    }
    CHECK(ended == TimePoint{});  // still waiting
    const Result<void> joined = co_await helper.join();
    CHECK(ended != TimePoint{});
    co_return joined;
}

Task<void> closed_under_way(SessionBench* bench) {
    TimePoint ended{};
    TaskGroup helper(bench->io);
    bench->scripted.silent = true;
    helper.spawn("read", one_read(bench));
    co_await bench->time.sleep_until(bench->time.now() + milliseconds(10));
    const TimePoint began = bench->time.now();
    const Result<void> closed = co_await bench->board->close();
    CHECK(good(closed));
    Result<void> read = co_await helper.join();
    CHECK((!read && read.error().cause == Cause::stopped));
    CHECK(bench->time.now() == began);
    Result<void> later = co_await one_read(bench);
    CHECK((!later && later.error().cause == Cause::stopped));
    co_return Result<void>{};
}

Task<void> too_early_deadline(SessionBench* bench) {
    bench->scripted.silent = true;
    const TimePoint began = bench->time.now();
    Result<BatchReply> reply =
        co_await bench->registers().run(Lane{0}, reads_scratch(*bench), began + milliseconds(30));
    CHECK((!reply && reply.error().cause == Cause::timeout));
    CHECK(bench->time.now() - began == milliseconds(30));
    co_return Result<void>{};
}

}  // namespace

TEST_CASE("a batch that waits on the board holds up no other") {
    SessionBench bench;
    CHECK(good(bench.run(short_beside_long)));
    CHECK(bench.last_statistics.retries == 0);
}

TEST_CASE("closing ends whatever is under way at once") {
    SessionBench bench;
    CHECK(good(bench.run(closed_under_way)));
}

TEST_CASE("a caller's deadline is kept even where attempts are left") {
    SessionBench bench;
    CHECK(good(bench.run(too_early_deadline)));
}

namespace {

MemoryOptions reconnecting_memory() {
    MemoryOptions options = SessionBench::slow_memory();
    options.after_deadline = AfterDeadline::reconnect;
    return options;
}

// The connection swallows everything the host sends until it is opened anew.
Task<void> strobe_on_dead_connection(SessionBench* bench) {
    bench->pair.cable->on_host_writes([bench](Bytes bytes) -> std::vector<MemoryPiece> {
        const bool dead = bench->statistics().reconnects == 0;
        return dead ? std::vector<MemoryPiece>{} : std::vector<MemoryPiece>{{std::move(bytes), {}}};
    });
    co_return co_await one_strobe(bench);
}

Task<void> wrong_board_after_reconnection(SessionBench* bench) {
    bench->scripted.registers[at_id] = 0x4321;
    bench->pair.cable->cut();
    co_return co_await one_strobe(bench);
}

Task<void> reset_while_unplugged(SessionBench* bench) {
    Result<void> before = co_await one_strobe(bench);
    CHECK(good(before));
    bench->pair.cable->unplug();
    bench->scripted.reset();
    TaskGroup helper(bench->io);
    helper.spawn("plug in", plug_in_later(bench));
    Result<void> outcome = co_await one_strobe(bench);
    const Result<void> joined = co_await helper.join();
    co_return outcome;
}

}  // namespace

TEST_CASE("a connection that went dead without a word is opened anew and the batch done once") {
    SessionBench bench(reconnecting_memory());
    CHECK(good(bench.run(strobe_on_dead_connection)));
    CHECK(bench.last_statistics.reconnects == 1);
    CHECK(writes_to(bench, at_load) == 1);
}

TEST_CASE("another board behind the same cable is never written to, and named in the end") {
    SessionBench bench;
    const Result<void> outcome = bench.run(wrong_board_after_reconnection);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::wrong_board);
    CHECK(bench.scripted.writes.empty());
}

TEST_CASE("a reset behind a lost cable is told before anything is carried out") {
    SessionBench bench;
    const Result<void> outcome = bench.run(reset_while_unplugged);
    REQUIRE(!outcome);
    CHECK(outcome.error().cause == Cause::board_reset);
    CHECK(writes_to(bench, at_load) == 1);  // the one before
    CHECK(bench.last_statistics.resets == 1);
}
