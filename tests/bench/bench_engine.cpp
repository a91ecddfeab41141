// What the engine and its store cost: readings stored durably a second, one by one and in batches
// such as eight lanes give, and CPU time per reading of whole runs on a board that answers at once
// in virtual time.

#include <chrono>
#include <iostream>
#include <stdexcept>
#include <string>
#include <vector>

#include "tests/bench/rows.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::bench;

namespace {

constexpr std::size_t lanes = 8;

// As the demo's board gives it: five registers set, a wait, five read.
ReadingTaken typical_reading(std::size_t ordinal) {
    ReadingTaken taken;
    taken.lane = Lane{static_cast<std::uint16_t>(ordinal % lanes)};
    taken.ordinal = static_cast<std::uint32_t>(ordinal / lanes);
    Reading& reading = taken.reading;
    reading.codes = {{9, 15, 7, 2}};
    reading.status = Status::open;
    reading.up_mv = reading.down_mv = Measured{42, 1.15, Bound::exact};
    reading.left_ui = reading.right_ui = Measured{0.375, 0.0075, Bound::exact};
    reading.error_ratio = 1e-6;
    reading.bit_count = std::uint64_t{1} << 31;
    reading.cost_s = 0.087;
    for (std::uint32_t i = 0; i < 11; ++i) {
        WireOperation operation;
        operation.kind = i < 5   ? WireOperation::Kind::write
                         : i > 5 ? WireOperation::Kind::read
                                 : WireOperation::Kind::wait_until;
        operation.address = 0x100 + i;
        operation.mask = 0xFF;
        operation.value = i;
        operation.result = i;
        operation.read_back = i < 5;
        taken.wire.push_back(operation);
    }
    return taken;
}

Task<void> append_all(Store& store, RunId run, std::size_t count, std::size_t batch) {
    for (std::size_t i = 0; i < count; i += batch) {
        std::vector<Event> events;
        for (std::size_t j = 0; j < batch; ++j) events.emplace_back(typical_reading(i + j));
        auto stored = co_await store.append(run, std::move(events));
        if (!stored) co_return stored.error();
    }
    co_return Result<void>{};
}

double readings_stored_per_s(std::size_t count, std::size_t batch) {
    const test::TemporaryFolder folder;
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    const auto store = Store::open(folder / "store.db", time).value();
    Manifest manifest;
    manifest.run = "bench";
    run_until_done(time, store->add_run(manifest)).value();
    const auto start = std::chrono::steady_clock::now();
    run_until_done(time, append_all(*store, manifest.run, count, batch)).value();
    return static_cast<double>(count) /
           std::chrono::duration<double>(std::chrono::steady_clock::now() - start).count();
}

void measure_store(Rows& rows) {
    for (const std::size_t batch : {std::size_t{1}, lanes}) {
        const std::size_t count = 250 * batch;
        rows.row({.name = "stored_readings.batch_of_" + std::to_string(batch),
                  .value = readings_stored_per_s(count, batch),
                  .unit = "1/s",
                  .better = Better::more,
                  // Eight lanes at 0.1 s a reading bring 80 a second; each is stored by itself at
                  // worst.
                  .must = 80,
                  .aim = 1000,
                  .n = count});
    }
}

void measure_engine(Rows& rows) {
    test::EngineBench bench;
    test::StartOptions options;
    options.lanes = {0, 1, 2, 3, 4, 5, 6, 7};
    std::size_t readings = 0;
    options.on_event = [&readings](const StoredEvent& event, Stop&) {
        if (std::holds_alternative<ReadingTaken>(event.event)) ++readings;
    };
    const double before = cpu_seconds();
    const test::Start run = bench.start(options);
    const double cpu_s = cpu_seconds() - before;
    if (run.outcome.has_error() || readings == 0) {
        throw std::runtime_error("the engine's run did not come to its end");
    }
    rows.row({.name = "engine_cpu_per_reading",
              .value = 1e3 * cpu_s / static_cast<double>(readings),
              .unit = "cpu ms",
              .better = Better::less,
              .must = 10,
              .aim = 1,
              .n = readings,
              .seed = options.seed});
}

}  // namespace

int main() {
    Rows rows(std::cout);
    measure_store(rows);
    measure_engine(rows);
    return rows.finish();
}
