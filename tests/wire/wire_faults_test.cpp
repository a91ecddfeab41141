#include <fcntl.h>
#include <sys/file.h>
#include <sys/wait.h>
#include <unistd.h>
#include <csignal>
#include <map>

#include "drivers/io/task_group.hpp"
#include "sim_target/physics/truth.hpp"
#include "tests/wire/target_process.hpp"
#include "tests/wire/wire_bench.hpp"

using namespace lanewright;
using namespace lanewright::tests;
using namespace std::chrono_literals;

namespace {

constexpr std::uint16_t lane_count = 8;

nlohmann::json with_faults(nlohmann::json faults) {
    nlohmann::json target = demo_target();
    target["faults"] = std::move(faults);
    return target;
}

Codes codes_for(std::uint32_t number) {
    const auto part = [number](std::uint32_t factor, std::uint32_t count) {
        return static_cast<std::int32_t>(number * factor % count);
    };
    return {{part(7, 31), part(5, 16), part(3, 16), part(1, 8)}};
}

struct Tally {
    int done = 0, voids = 0, wrong = 0;
};

using Wire = std::map<std::pair<std::uint16_t, std::uint32_t>, std::vector<WireOperation>>;

// By turns: apply and read the codes back, or a whole reading, whose wire record is kept.
Task<void> work_on_lane(Board& board, std::uint16_t lane, std::uint32_t count, Tally& tally,
                        Wire& wire) {
    for (std::uint32_t number = 1; number <= count; ++number) {
        const Codes wanted = codes_for(number + lane);
        if (number % 2 == 0) {
            auto applied = co_await apply_until_valid(board, Lane{lane}, wanted, tally.voids);
            if (applied.has_error()) co_return applied.error();
            auto codes = co_await board.lanes().codes(Lane{lane});
            const bool told = codes.has_error() && codes.error().cause == Cause::board_reset;
            if (codes.has_error() && !told) co_return codes.error();
            if (!told && *codes != wanted) ++tally.wrong;
            if (applied->codes != wanted) ++tally.wrong;
        } else {
            auto reading = co_await read_until_valid(board, Lane{lane}, margin_at(wanted), number,
                                                     tally.voids);
            if (reading.has_error()) co_return reading.error();
            if (reading->reading.codes != wanted) ++tally.wrong;
            wire[{lane, number}] = reading->wire;
        }
        ++tally.done;
    }
    co_return Result<void>{};
}

Result<void> work(WireBench& bench, std::uint32_t count, Tally& tally, Wire& wire) {
    TaskGroup group(bench.io);
    for (std::uint16_t lane = 0; lane < lane_count; ++lane) {
        group.spawn("lane", work_on_lane(*bench.board, lane, count, tally, wire));
    }
    return bench.run(group.join());
}

// A board whose readings say the same when they are taken again: the chip counts its losses of lock
// on and on, and anew after a reset.
BoardFile board_without_counters(const std::string& link, double deadline_ms) {
    BoardFile board = demo_board(link, deadline_ms);
    std::erase_if(board.telemetry, [](const TelemetryField& each) {
        return each.field.text().starts_with("RX_LOSSES.");
    });
    return board;
}

Wire undisturbed(std::uint32_t count, BoardFile (*board)(const std::string&, double)) {
    TargetProcess process(demo_target());
    WireBench bench(board(process.tcp(), 400));
    REQUIRE(bench.open().has_value());
    Tally tally;
    Wire wire;
    REQUIRE(work(bench, count, tally, wire).has_value());
    CHECK(tally.voids == 0);
    return wire;
}

// The lanes and numbers whose records are not the same, for a person to read.
std::string differences(const Wire& wire, const Wire& expected) {
    std::string text = wire.size() == expected.size() ? "" : "another number of readings";
    for (const auto& [place, operations] : wire) {
        const auto found = expected.find(place);
        if (found != expected.end() && found->second == operations) continue;
        text += " lane " + std::to_string(place.first) + " number " + std::to_string(place.second);
    }
    return text;
}

Fault failure_to_open(const nlohmann::json& target, bool serial = false) {
    TargetProcess process(target);
    BoardFile file = demo_board(serial ? process.serial() : process.tcp(), 50);
    file.dialect.attempts = 3;
    WireBench bench(file);
    const auto opened = bench.open();
    REQUIRE(opened.has_error());
    return opened.error();
}

// A process that holds the lock on the path until the end of the object.
class LockHolder {
  public:
    explicit LockHolder(const std::string& path) {
        int ready[2];
        REQUIRE(::pipe(ready) == 0);
        pid_ = ::fork();
        if (pid_ == 0) {
            const int fd = ::open(path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK);
            const char locked = ::flock(fd, LOCK_EX | LOCK_NB) == 0 ? 'y' : 'n';
            if (::write(ready[1], &locked, 1) != 1) ::_exit(1);
            for (;;) ::pause();
        }
        char locked = 'n';
        REQUIRE(::read(ready[0], &locked, 1) == 1);
        REQUIRE(locked == 'y');
        ::close(ready[0]);
        ::close(ready[1]);
    }
    ~LockHolder() {
        ::kill(pid_, SIGKILL);
        ::waitpid(pid_, nullptr, 0);
    }
    LockHolder(const LockHolder&) = delete;
    LockHolder& operator=(const LockHolder&) = delete;
    pid_t pid() const { return pid_; }

  private:
    pid_t pid_ = 0;
};

}  // namespace

TEST_CASE("Two thousand transactions over a bad wire with resets accept no wrong value") {
    constexpr std::uint32_t count_of_lane = 125;
    const bool serial = GENERATE(false, true);
    const Wire expected = undisturbed(count_of_lane, board_without_counters);
    TargetProcess process(with_faults({{"seed", 7},
                                       {"flip", {{"probability", 0.01}}},
                                       {"cut", {{"probability", 0.01}}},
                                       {"twice", {{"probability", 0.01}}},
                                       {"late", {{"probability", 0.01}, {"by_ms", 120}}},
                                       {"reset", {{"at_batches", {301, 777}}}}}));
    WireBench bench(board_without_counters(serial ? process.serial() : process.tcp(), 60), 100);
    const auto opened = bench.open();
    INFO((opened.has_error() ? opened.error().text() : std::string()));
    REQUIRE(opened.has_value());
    Tally tally;
    Wire wire;
    // Twice 8 lanes with 125 units of work each: 2,000 batches at least, and 1,000 more for the
    // codes read back on their own.
    for (int round = 0; round < 2; ++round) {
        const auto result = work(bench, count_of_lane, tally, wire);
        INFO((result.has_error() ? result.error().text() : std::string()));
        REQUIRE(result.has_value());
    }
    CHECK(tally.done == 2 * lane_count * count_of_lane);
    CHECK(tally.wrong == 0);
    CHECK(tally.voids >= 2);
    CHECK_THAT(differences(wire, expected), Catch::Equals(""));
    const SessionStatistics seen = bench.board->statistics();
    CAPTURE(seen.frames, seen.bad_frames, seen.retries, seen.reconnects, seen.resets, tally.voids);
    CHECK(seen.resets == 2);
    CHECK(seen.bad_frames > 10);
    CHECK(seen.retries > 10);
}

TEST_CASE("Console text between frames is dropped and counted") {
    TargetProcess process(
        with_faults({{"console", {{"probability", 0.3}, {"text", "\r\n[ 12.345] fan 2 ok\r\n"}}}}));
    WireBench bench(demo_board(process.serial()));
    REQUIRE(bench.open().has_value());
    Tally tally;
    Wire wire;
    REQUIRE(work(bench, 10, tally, wire).has_value());
    CHECK(tally.wrong == 0);
    CHECK(tally.voids == 0);
    CHECK(bench.board->statistics().bad_frames > 5);
    CHECK(bench.board->statistics().retries == 0);
}

TEST_CASE("A silent board is given up after its attempts") {
    const bool serial = GENERATE(false, true);
    const Fault fault = failure_to_open(with_faults({{"silent_from_frame", 1}}), serial);
    INFO(fault.text());
    CHECK(fault.cause == Cause::timeout);
}

TEST_CASE("A board that answers garbage is given up") {
    const Fault fault = failure_to_open(with_faults({{"garbage_from_frame", 1}}), true);
    INFO(fault.text());
    CHECK(fault.cause == Cause::timeout);
}

TEST_CASE("Another board on the right port is refused with both identities") {
    const Fault fault = failure_to_open(with_faults({{"wrong_identity", {{"REVISION.major", 3}}}}));
    INFO(fault.text());
    CHECK(fault.cause == Cause::wrong_board);
    CHECK(fault.text().find("major") != std::string::npos);
    CHECK(fault.text().find('3') != std::string::npos);
}

TEST_CASE("A port held by another process is refused with its pid") {
    TargetProcess process(demo_target());
    LockHolder holder(process.pty_path());
    WireBench bench(demo_board(process.serial()));
    const auto opened = bench.open();
    REQUIRE(opened.has_error());
    const Fault& fault = opened.error();
    INFO(fault.text());
    CHECK(fault.cause == Cause::busy);
    CHECK(fault.text().find("process " + std::to_string(holder.pid())) != std::string::npos);
}

TEST_CASE("A cable that goes and comes back costs no wrong value") {
    const bool serial = GENERATE(false, true);
    TargetProcess process(with_faults({{"drop", {{"at_frame", 60}, {"back_after_ms", 300}}}}));
    WireBench bench(demo_board(serial ? process.serial() : process.tcp()));
    REQUIRE(bench.open().has_value());
    const Wire expected = undisturbed(20, demo_board);
    Tally tally;
    Wire wire;
    const auto result = work(bench, 20, tally, wire);
    INFO((result.has_error() ? result.error().text() : std::string()));
    REQUIRE(result.has_value());
    CHECK(tally.wrong == 0);
    CHECK_THAT(differences(wire, expected), Catch::Equals(""));
    CHECK(bench.board->statistics().reconnects >= 1);
    CHECK(bench.board->statistics().resets == 0);
}

TEST_CASE("A cable that stays away ends the run within its patience") {
    TargetProcess process(with_faults({{"drop", {{"at_frame", 40}, {"back_after_ms", 60'000}}}}));
    BoardFile file = demo_board(process.tcp());
    file.dialect.patience_s = 1;
    WireBench bench(file);
    REQUIRE(bench.open().has_value());
    Tally tally;
    Wire wire;
    const TimePoint start = bench.time.now();
    const auto result = work(bench, 50, tally, wire);
    REQUIRE(result.has_error());
    INFO(result.error().text());
    CHECK(result.error().cause == Cause::unreachable);
    CHECK(bench.time.now() - start < 10s);
}
