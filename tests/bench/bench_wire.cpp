// Register transactions a second against the simulated board in a process of its own, over TCP
// and over a pseudo-terminal at 921,600 baud, beside what the line itself allows.

#include <algorithm>
#include <iostream>
#include <stdexcept>
#include <vector>

#include "drivers/board/board.hpp"
#include "drivers/board/make_link.hpp"
#include "drivers/io/task_group.hpp"
#include "tests/bench/rows.hpp"
#include "tests/wire/target_process.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

struct Traffic {
    std::uint64_t sent = 0, received = 0;
};

// Passes everything on and counts it.
class CountingLink final : public Link {
  public:
    CountingLink(std::unique_ptr<Link> inner, Traffic& traffic)
        : inner_(std::move(inner)), traffic_(traffic) {}
    Task<void> open(TimePoint deadline) override { return inner_->open(deadline); }
    Task<std::size_t> read_some(std::span<std::byte> buffer) override {
        auto size = co_await inner_->read_some(buffer);
        if (size.has_value()) traffic_.received += *size;
        co_return size;
    }
    Task<void> write(Bytes bytes) override {
        traffic_.sent += bytes.size();
        return inner_->write(std::move(bytes));
    }
    void close() noexcept override { inner_->close(); }
    bool is_open() const override { return inner_->is_open(); }
    const LinkTraits& traits() const override { return inner_->traits(); }

  private:
    std::unique_ptr<Link> inner_;
    Traffic& traffic_;
};

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

}  // namespace

int main() {
    nlohmann::json target = demo_target();
    target["time_scale"] = 1;
    target["wire"]["latency_us"] = 0;
    const TargetProcess process(target);
    bench::Rows rows(std::cout);
    measure_tcp(rows, process);
    measure_serial(rows, process);
    return rows.finish();
}
