#include <boost/asio/post.hpp>
#include <catch2/catch.hpp>
#include <thread>

#include "drivers/io/loop_watch.hpp"
#include "drivers/io/task_group.hpp"
#include "drivers/io/time_source.hpp"
#include "drivers/io/turnstile.hpp"
#include "drivers/io/workers.hpp"

using namespace lanewright;
using namespace std::chrono_literals;
namespace asio = boost::asio;

namespace {

struct Bench {
    asio::io_context io;
    VirtualTimeSource time{io};
};

Task<void> sleep_for(TimeSource& time, std::chrono::nanoseconds span, Stop stop) {
    Fault fault;
    fault.cause = Cause::stopped;
    if (co_await time.sleep_until(time.now() + span, stop) == Woke::stopped) co_return fault;
    co_return Result<void>{};
}

Task<void> hours_of_bench(TimeSource& time, int sleeps, Stop stop) {
    for (int i = 0; i < sleeps; ++i) {
        auto slept = co_await sleep_for(time, 1s, stop);
        if (slept.has_error()) co_return slept.error();
    }
    co_return Result<void>{};
}

Task<void> many_at_once(TimeSource& time, TaskGroup& group, int tasks, int sleeps) {
    for (int i = 0; i < tasks; ++i) {
        group.spawn("bench", hours_of_bench(time, sleeps, group.stop_of_tasks()));
    }
    co_return co_await group.join();
}

Task<std::vector<Woke>> wait_times(TimeSource& time, Signal& signal, int count) {
    std::vector<Woke> all;
    for (int i = 0; i < count; ++i) {
        all.push_back(co_await time.wait(signal, time.now() + 10ms));
    }
    co_return all;
}

Task<void> raise_after(TimeSource& time, Signal& signal, std::chrono::nanoseconds span) {
    co_await time.sleep_until(time.now() + span);
    signal.raise();
    co_return Result<void>{};
}

Task<void> fail_after(TimeSource& time, std::chrono::nanoseconds span, Cause cause) {
    co_await time.sleep_until(time.now() + span);
    Fault fault;
    fault.cause = cause;
    co_return fault;
}

Task<void> throw_now() {
    throw std::runtime_error("broken on purpose");
    co_return Result<void>{};
}

Task<int> compute_square(Workers& workers, int number) {
    const auto io_thread = std::this_thread::get_id();
    std::thread::id pool_thread;
    const int square = co_await compute(workers, [number, &pool_thread] {
        pool_thread = std::this_thread::get_id();
        std::this_thread::sleep_for(5ms);
        return number * number;
    });
    if (pool_thread == io_thread || std::this_thread::get_id() != io_thread) co_return -1;
    co_return square;
}

Task<int> compute_that_throws(Workers& workers) {
    co_return co_await compute(workers, []() -> int { throw std::domain_error("no such margin"); });
}

Task<void> visit(TimeSource& time, Turnstile& turnstile, std::vector<int>& order, int who,
                 std::chrono::nanoseconds patience, Stop stop) {
    auto pass = co_await turnstile.enter(time, time.now() + patience, stop);
    if (pass.has_error()) {
        order.push_back(-who);
        co_return pass.error();
    }
    order.push_back(who);
    co_await time.sleep_until(time.now() + 10ms);
    co_return Result<void>{};
}

}  // namespace

TEST_CASE("Hours of sleeping tasks run in seconds of virtual time") {
    Bench bench;
    TaskGroup group(bench.io);
    const TimePoint before = bench.time.now();
    const auto wall = std::chrono::steady_clock::now();
    const auto result = run_until_done(bench.time, many_at_once(bench.time, group, 10, 3600));
    CHECK(result.has_value());
    CHECK(bench.time.now() - before == 3600s);
    CHECK(std::chrono::steady_clock::now() - wall < 10s);
}

TEST_CASE("A wait tells a signal, a deadline and a stop apart") {
    Bench bench;
    Stop stop(bench.io);
    Signal signal(bench.io, Signal::Kind::counted, stop);
    TaskGroup group(bench.io);
    group.spawn("raiser", raise_after(bench.time, signal, 15ms));
    const auto first = run_until_done(bench.time, wait_times(bench.time, signal, 3));
    CHECK(*first == std::vector{Woke::deadline, Woke::signalled, Woke::deadline});
    bench.time.io().restart();
    stop.request();
    const auto second = run_until_done(bench.time, wait_times(bench.time, signal, 1));
    CHECK(*second == std::vector{Woke::stopped});
    CHECK(run_until_done(bench.time, group.join()).has_value());
}

TEST_CASE("A counted signal keeps every raise and a level signal stays until it is lowered") {
    Bench bench;
    Signal counted(bench.io, Signal::Kind::counted), level(bench.io);
    counted.raise();
    counted.raise();
    level.raise();
    CHECK(*run_until_done(bench.time, wait_times(bench.time, counted, 3)) ==
          std::vector{Woke::signalled, Woke::signalled, Woke::deadline});
    CHECK(*run_until_done(bench.time, wait_times(bench.time, level, 2)) ==
          std::vector{Woke::signalled, Woke::signalled});
    level.lower();
    CHECK(*run_until_done(bench.time, wait_times(bench.time, level, 1)) ==
          std::vector{Woke::deadline});
}

TEST_CASE("A signal raised from another thread wakes the steady clock's wait") {
    asio::io_context io;
    SteadyTimeSource time(io);
    Signal signal(io);
    std::jthread raiser([poster = signal.poster()] {
        std::this_thread::sleep_for(5ms);
        poster();
    });
    const auto woke =
        run_until_done(time, [](TimeSource& source, Signal& its_signal) -> Task<Woke> {
            co_return co_await source.wait(its_signal, source.now() + 20s);
        }(time, signal));
    CHECK(*woke == Woke::signalled);
}

TEST_CASE("The steady clock's waits end at their deadlines in order, and not before") {
    asio::io_context io;
    SteadyTimeSource time(io);
    std::vector<int> order;
    const TimePoint start = time.now();
    const Alarm late(time, start + 30ms, [&] { order.push_back(3); });
    const Alarm early(time, start + 10ms, [&] { order.push_back(1); });
    auto dropped = std::make_unique<Alarm>(time, start + 15ms, [&] { order.push_back(9); });
    const Alarm middle(time, start + 20ms, [&] { order.push_back(2); });
    dropped.reset();
    time.run();
    CHECK(order == std::vector{1, 2, 3});
    CHECK(time.now() - start >= 30ms);
}

TEST_CASE("A stop reaches waits in child groups and wakes them at once") {
    Bench bench;
    Stop stop(bench.io);
    TaskGroup outer(bench.io, stop), inner(bench.io, outer.stop_of_tasks());
    inner.spawn("long sleep", hours_of_bench(bench.time, 1000, inner.stop_of_tasks()));
    const Alarm alarm(bench.time, bench.time.now() + 2500ms, [&] { stop.request(); });
    const TimePoint before = bench.time.now();
    const auto joined = run_until_done(bench.time, inner.join());
    REQUIRE(joined.has_error());
    CHECK(joined.error().cause == Cause::stopped);
    CHECK(bench.time.now() - before == 2500ms);
    CHECK(outer.stopping());
}

TEST_CASE("A task group keeps the first real fault and names the task that threw") {
    Bench bench;
    TaskGroup group(bench.io);
    group.spawn("stopped", fail_after(bench.time, 1ms, Cause::stopped));
    group.spawn("busy", fail_after(bench.time, 2ms, Cause::busy));
    group.spawn("timeout", fail_after(bench.time, 3ms, Cause::timeout));
    CHECK(run_until_done(bench.time, group.join()).error().cause == Cause::busy);
    group.spawn("thrower", throw_now());
    const auto thrown = run_until_done(bench.time, group.join());
    CHECK(thrown.error().cause == Cause::internal);
    CHECK(thrown.error().what == "task thrower: broken on purpose");
    CHECK(run_until_done(bench.time, group.join()).has_value());
}

TEST_CASE("A job runs on the pool, comes back to the io thread, and virtual time stands still") {
    Bench bench;
    Workers workers(bench.time, 2);
    bool rang = false;
    const Alarm alarm(bench.time, bench.time.now() + 1ns, [&] { rang = true; });
    const auto square = run_until_done(bench.time, compute_square(workers, 12));
    CHECK(*square == 144);
    CHECK_FALSE(rang);
    CHECK_THROWS_AS(run_until_done(bench.time, compute_that_throws(workers)), std::domain_error);
}

TEST_CASE("A turnstile lets one in at a time, in order, past those who gave up") {
    Bench bench;
    Turnstile turnstile(bench.io);
    TaskGroup group(bench.io);
    Stop stop(bench.io);
    std::vector<int> order;
    group.spawn("1", visit(bench.time, turnstile, order, 1, 1s, stop));
    group.spawn("2", visit(bench.time, turnstile, order, 2, 1s, stop));
    group.spawn("3", visit(bench.time, turnstile, order, 3, 5ms, stop));
    group.spawn("4", visit(bench.time, turnstile, order, 4, 1s, stop));
    CHECK(run_until_done(bench.time, group.join()).error().cause == Cause::timeout);
    CHECK(order == std::vector{1, -3, 2, 4});
    CHECK_FALSE(turnstile.taken());
    CHECK(turnstile.waiting() == 0);
}

TEST_CASE("A stop takes those in line out of the turnstile and loses no turn") {
    Bench bench;
    Turnstile turnstile(bench.io);
    TaskGroup group(bench.io);
    Stop stop(bench.io), never(bench.io);
    std::vector<int> order;
    group.spawn("1", visit(bench.time, turnstile, order, 1, 1s, never));
    group.spawn("2", visit(bench.time, turnstile, order, 2, 1s, stop));
    group.spawn("3", visit(bench.time, turnstile, order, 3, 1s, never));
    // The same instant as the first visitor's leaving: the turn and the stop meet.
    const Alarm alarm(bench.time, bench.time.now() + 10ms, [&] { stop.request(); });
    CHECK(run_until_done(bench.time, group.join()).error().cause == Cause::stopped);
    CHECK(order == std::vector{1, -2, 3});
    CHECK_FALSE(turnstile.taken());
}

TEST_CASE("The loop watch sees a handler that holds the io thread") {
    asio::io_context io;
    SteadyTimeSource time(io);
    const auto busy = [](TimeSource& source, std::chrono::nanoseconds span) -> Task<void> {
        for (int i = 0; i < 20; ++i) co_await source.sleep_until(source.now() + 1ms);
        const auto until = source.now() + span;
        while (source.now() < until) continue;
        for (int i = 0; i < 20; ++i) co_await source.sleep_until(source.now() + 1ms);
        co_return Result<void>{};
    };
    const auto longest_for = [&](std::chrono::nanoseconds span) {
        LoopWatch watch(io);
        run_until_done(time, busy(time, span));
        return std::pair(watch.longest_busy(), watch.longest_delay());
    };
    CHECK(longest_for(0ms).first < 5ms);
    const auto [spent, delay] = longest_for(60ms);
    CHECK(spent > 15ms);
    CHECK(delay > 30ms);
}
