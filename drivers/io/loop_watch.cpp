#include "drivers/io/loop_watch.hpp"

#include <atomic>
#include <boost/asio/post.hpp>
#include <ctime>
#include <thread>

namespace lanewright {

namespace {

std::chrono::nanoseconds processor_time_of_thread() {
    std::timespec spent{};
    ::clock_gettime(CLOCK_THREAD_CPUTIME_ID, &spent);
    return std::chrono::seconds(spent.tv_sec) + std::chrono::nanoseconds(spent.tv_nsec);
}

void raise_to(std::atomic<std::int64_t>& top, std::int64_t value) {
    std::int64_t seen = top;
    while (value > seen && !top.compare_exchange_weak(seen, value)) continue;
}

}  // namespace

struct LoopWatch::State {
    std::atomic<std::int64_t> busy_ns{0}, delay_ns{0};
    std::atomic<bool> probe_under_way{false};
    std::chrono::nanoseconds last{-1};  // io thread only
    std::jthread prober;

    void probed(std::chrono::steady_clock::time_point sent) {
        const auto spent = processor_time_of_thread();
        if (last.count() >= 0) raise_to(busy_ns, (spent - last).count());
        last = spent;
        raise_to(delay_ns,
                 std::chrono::nanoseconds(std::chrono::steady_clock::now() - sent).count());
        probe_under_way = false;
    }
};

LoopWatch::LoopWatch(boost::asio::io_context& io) : state_(std::make_shared<State>()) {
    std::weak_ptr<State> weak = state_;
    state_->prober = std::jthread([weak, raw = state_.get(), &io](const std::stop_token& stop) {
        while (!stop.stop_requested()) {
            if (!raw->probe_under_way.exchange(true)) {
                boost::asio::post(io, [weak, sent = std::chrono::steady_clock::now()] {
                    if (const auto state = weak.lock()) state->probed(sent);
                });
            }
            std::this_thread::sleep_for(std::chrono::microseconds(200));
        }
    });
}

LoopWatch::~LoopWatch() {
    state_->prober.request_stop();
    state_->prober.join();
}

std::chrono::nanoseconds LoopWatch::longest_busy() const {
    return std::chrono::nanoseconds(state_->busy_ns);
}

std::chrono::nanoseconds LoopWatch::longest_delay() const {
    return std::chrono::nanoseconds(state_->delay_ns);
}

}  // namespace lanewright
