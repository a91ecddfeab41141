// Register transactions a second against the simulated board in a process of its own, over TCP
// and over a pseudo-terminal at 921,600 baud, beside what the line itself allows. And the bytes
// that one look of a counted reading costs.

#include <algorithm>
#include <iostream>
#include <stdexcept>
#include <vector>

#include "drivers/board/board.hpp"
#include "drivers/board/make_link.hpp"
#include "drivers/io/task_group.hpp"
#include "tests/bench/rows.hpp"
#include "tests/wire/counting_link.hpp"
#include "tests/wire/target_process.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

Task<void> transact(Board& board, unsigned count) {
    for (unsigned i = 0; i < count; ++i) {
        Batch batch;
        auto added = board.map().read(batch, Lane{0}, board.file().scratch);
        if (added.has_error()) co_return added.error();
        auto reply = co_await board.registers().run(board_wide, batch,
                                                    board.now() + std::chrono::seconds(10));
        if (reply.has_error()) co_return reply.error();
    }
    co_return Result<void>{};
}

struct Measured {
    double per_s = 0;
    double sent_bytes = 0, received_bytes = 0;  // a transaction
};

Measured measure_once(const std::string& address, unsigned at_once, unsigned count) {
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    Traffic traffic;
    const BoardFile file = demo_board(address, 1000);
    auto link = std::make_unique<CountingLink>(make_link(time, file.link), traffic);
    auto board = run_until_done(time, open_board(file, std::move(link), time)).value();
    const Traffic before = traffic;
    const std::uint64_t frames_before = board->statistics().frames;
    const TimePoint start = time.now();
    TaskGroup group(io);
    for (unsigned i = 0; i < at_once; ++i) group.spawn("asker", transact(*board, count / at_once));
    run_until_done(time, group.join()).value();
    const double took_s = std::chrono::duration<double>(time.now() - start).count();
    // A rate counts only if every transaction was a question and an answer on the wire.
    const std::uint64_t frames = board->statistics().frames - frames_before;
    run_until_done(time, board->close()).value();
    if (frames != 2 * std::uint64_t{count}) {
        throw std::runtime_error(std::to_string(frames) + " frames for " + std::to_string(count) +
                                 " transactions");
    }
    return {count / took_s, static_cast<double>(traffic.sent - before.sent) / count,
            static_cast<double>(traffic.received - before.received) / count};
}

// The middle one of five: a round trip of some microseconds depends much on what else runs.
Measured measure(const std::string& address, unsigned at_once, unsigned count) {
    std::vector<Measured> all;
    for (int i = 0; i < 5; ++i) all.push_back(measure_once(address, at_once, count));
    std::sort(all.begin(), all.end(),
              [](const Measured& one, const Measured& other) { return one.per_s < other.per_s; });
    return all[all.size() / 2];
}

constexpr double bytes_per_s = 921600 / 10.0;  // start bit, eight, stop bit

void measure_tcp(bench::Rows& rows, const TargetProcess& process) {
    constexpr unsigned count = 4000;
    const auto row = [&rows](const std::string& name, double value, double must) {
        rows.row({.name = name,
                  .value = value,
                  .unit = "1/s",
                  .better = bench::Better::more,
                  .must = must,
                  .aim = 3 * must,
                  .n = count,
                  .seed = 0});
    };
    row("tcp_transactions_one_by_one", measure(process.tcp(), 1, count).per_s, 2000);
    row("tcp_transactions_eight_at_once", measure(process.tcp(), 8, count).per_s, 4000);
}

// One by one, question and answer take turns on the line; several at once, both directions are
// busy, and the fuller one is the limit.
void measure_serial(bench::Rows& rows, const TargetProcess& process) {
    constexpr unsigned count = 2000;
    const auto row = [&rows](const std::string& name, double value, const char* unit,
                             std::optional<double> must, std::optional<double> aim) {
        rows.row({.name = name,
                  .value = value,
                  .unit = unit,
                  .better = bench::Better::more,
                  .must = must,
                  .aim = aim,
                  .n = count,
                  .seed = 0});
    };
    const Measured one = measure(process.serial(), 1, count);
    const double limit_one = bytes_per_s / (one.sent_bytes + one.received_bytes);
    row("serial_transactions_one_by_one", one.per_s, "1/s", std::nullopt, limit_one);
    row("serial_share_of_line_one_by_one", one.per_s / limit_one, "", 0.5, 0.8);
    const Measured many = measure(process.serial(), 8, count);
    const double limit_many = bytes_per_s / std::max(many.sent_bytes, many.received_bytes);
    row("serial_transactions_eight_at_once", many.per_s, "1/s", std::nullopt, limit_many);
    row("serial_share_of_line_eight_at_once", many.per_s / limit_many, "", 0.5, 0.9);
}

// Codes over the whole space, by a step that meets every bank.
Codes codes_of(std::uint32_t number) {
    const auto part = [number](std::uint32_t factor, std::uint32_t count) {
        return static_cast<std::int32_t>((number * factor + 3) % count);
    };
    return {{part(11, 31), part(5, 16), part(7, 16), part(3, 8)}};
}

struct LookCost {
    double bytes = 0, looks = 0, worst = 0;
    std::uint64_t readings = 0;
    void add(double reading_bytes, double reading_looks) {
        bytes += reading_bytes;
        looks += reading_looks;
        worst = std::max(worst, reading_bytes / reading_looks);
        ++readings;
    }
};

// Readings that start from nothing, those that start where the last one found the edges, and those
// of closed eyes.
struct LookCosts {
    LookCost afresh, expected, closed;
};

// One reading after another, so that every byte belongs to the one at hand.
Task<void> count_bytes(Board& board, Traffic& traffic, LookCosts& costs) {
    constexpr std::uint32_t codes_a_lane = 12;
    Request request;
    for (std::uint16_t lane = 0; lane < board.map().lane_count(); ++lane) {
        for (std::uint32_t number = 0; number < codes_a_lane; ++number) {
            request.codes = codes_of(lane + 8 * number);
            MarginWanted wanted;
            wanted.error_ratio = 1e-6;
            wanted.dwell_bits = std::uint64_t{1} << 31;
            for (std::uint32_t again = 0; again < 2; ++again) {
                request.what = wanted;
                const std::uint64_t before = traffic.both();
                const std::uint32_t ordinal = 2 * number + again + 1;
                auto got = co_await board.lanes().read(Lane{lane}, request, ordinal);
                if (got.has_error()) co_return got.error();
                const Reading& reading = got->reading;
                const auto looks = static_cast<double>(reading.counts.size());
                const auto bytes = static_cast<double>(traffic.both() - before);
                if (reading.status == Status::closed) costs.closed.add(bytes, looks);
                if (reading.status != Status::open) break;
                (again == 0 ? costs.afresh : costs.expected).add(bytes, looks);
                wanted.expected.up_mv = reading.up_mv->value;
                wanted.expected.down_mv = reading.down_mv->value;
                wanted.expected.left_ui = reading.left_ui->value;
                wanted.expected.right_ui = reading.right_ui->value;
            }
        }
    }
    co_return Result<void>{};
}

// All bytes of a reading, its codes, origin and telemetry among them, shared out over its looks.
void measure_counted(bench::Rows& rows, const TargetProcess& process) {
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    Traffic traffic;
    const BoardFile file = demo_counted_board(process.tcp(), 2000);
    auto link = std::make_unique<CountingLink>(make_link(time, file.link), traffic);
    auto board = run_until_done(time, open_board(file, std::move(link), time)).value();
    LookCosts costs;
    run_until_done(time, count_bytes(*board, traffic, costs)).value();
    run_until_done(time, board->close()).value();
    const auto row = [&rows](const std::string& name, double value, std::uint64_t n,
                             std::optional<double> must, const char* unit) {
        rows.row({.name = name,
                  .value = value,
                  .unit = unit,
                  .better = bench::Better::less,
                  .must = must,
                  .aim = std::nullopt,
                  .n = n,
                  .seed = 1});
    };
    const auto rows_of = [&row](const std::string& name, const LookCost& cost,
                                std::optional<double> must) {
        if (cost.readings == 0) return;
        const auto readings = static_cast<double>(cost.readings);
        row(name + "_bytes_a_look", cost.bytes / cost.looks, cost.readings, must, "B");
        row(name + "_bytes_worst", cost.worst, cost.readings, std::nullopt, "B");
        row(name + "_looks_a_reading", cost.looks / readings, cost.readings, std::nullopt, "");
    };
    rows_of("counted_afresh", costs.afresh, 50);
    rows_of("counted_expected", costs.expected, 50);
    rows_of("counted_closed", costs.closed, std::nullopt);
}

}  // namespace

int main() {
    nlohmann::json target = demo_target();
    target["time_scale"] = 1;
    target["wire"]["latency_us"] = 0;
    const TargetProcess process(target);
    bench::Rows rows(std::cout);
    measure_tcp(rows, process);
    measure_serial(rows, process);
    target["time_scale"] = 0;
    const TargetProcess counting(target);
    measure_counted(rows, counting);
    return rows.finish();
}
