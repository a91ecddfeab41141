#include "session_bench.hpp"

#include <stdexcept>

namespace lanewright::test {

MemoryOptions SessionBench::slow_memory() {
    MemoryOptions options;
    options.latency = std::chrono::milliseconds(1);
    return options;
}

SessionBench::SessionBench(MemoryOptions options)
    : pair(make_memory_pair(time, options)), scripted(time, *pair.board) {
    for (std::uint32_t lane = 0; lane < 2; ++lane) {
        for (std::uint32_t reg = 0; reg <= 12; ++reg) {
            scripted.registers[0x100 + 0x40 * lane + reg] = 0;
        }
        scripted.registers[at_status + 0x40 * lane] = 1;
        scripted.self_clearing.insert({at_load + 0x40 * lane, at_go + 0x40 * lane});
    }
    scripted.registers[at_id] = 0x1234;
    scripted.registers[at_scratch] = 0x77;
}

Task<void> SessionBench::whole(TestTask task) {
    scripted.start();
    Result<std::unique_ptr<Board>> opened =
        co_await open_board(file, std::move(pair.host), time, 1);
    Result<void> outcome;
    if (opened) {
        board = std::move(*opened);
        outcome = co_await task(this);
        last_statistics = board->statistics();
        const Result<void> closed = co_await board->close();
        if (outcome && !closed) outcome = closed.error();
    } else {
        outcome = opened.error();
    }
    const Result<void> ended = co_await scripted.close();
    board.reset();
    co_return outcome;
}

Result<void> SessionBench::run(TestTask task) {
    return run_until_done(time, whole(task));
}

Batch SessionBench::reads(const FieldName& name, Lane lane) const {
    Batch batch;
    if (!map.read(batch, lane, name)) throw std::runtime_error("cannot read " + name.text());
    return batch;
}

Batch SessionBench::writes_note(std::uint32_t value) const {
    Batch batch;
    if (!map.write_declared(batch, Lane{0}, {"NOTE", "value"}, value)) {
        throw std::runtime_error("cannot write");
    }
    return batch;
}

Batch SessionBench::strobes() const {
    Batch batch;
    if (!map.write_declared(batch, Lane{0}, {"LOAD", "strobe"}, 1)) {
        throw std::runtime_error("cannot strobe");
    }
    return batch;
}

}  // namespace lanewright::test
