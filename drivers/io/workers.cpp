#include "drivers/io/workers.hpp"

#include <boost/asio/as_tuple.hpp>
#include <boost/asio/post.hpp>
#include <boost/asio/thread_pool.hpp>
#include <boost/asio/use_awaitable.hpp>

namespace lanewright {

namespace asio = boost::asio;

struct Workers::Pool {
    explicit Pool(unsigned threads) : threads_of_pool(threads) {}
    asio::thread_pool threads_of_pool;
};

Workers::Workers(TimeSource& time, unsigned threads)
    : time_(time), pool_(std::make_unique<Pool>(threads == 0 ? 1 : threads)) {}

Workers::~Workers() {
    pool_->threads_of_pool.join();
}

asio::awaitable<void> Workers::run_there(std::function<void()> job) {
    struct Call {
        explicit Call(asio::io_context& io) : event(io, asio::steady_timer::time_point::max()) {}
        asio::steady_timer event;  // touched on the io thread only
        bool done = false;
    };
    auto& time = time_;
    auto& io = time.io();
    const auto call = std::make_shared<Call>(io);
    time.hold();
    asio::post(pool_->threads_of_pool, [job = std::move(job), call = call, &io, &time]() mutable {
        job();
        job = nullptr;  // what the job owns is given up before anyone is told
        asio::post(io, [call = std::move(call), &time] {
            call->done = true;
            call->event.cancel();
            time.release();
        });
    });
    while (!call->done) co_await call->event.async_wait(asio::as_tuple(asio::use_awaitable));
}

}  // namespace lanewright
