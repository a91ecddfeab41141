#pragma once
// Purpose:   a pool for work that would hold the io thread too long.
// Ownership: the destructor finishes what runs and joins. Destroy it before the io_context.
// Threads:   compute is called on the io thread and returns there; the job runs on the pool and
//            must own, or have to itself, all it touches.

#include <boost/asio/awaitable.hpp>
#include <exception>
#include <functional>
#include <memory>
#include <type_traits>
#include <utility>
#include <variant>

#include "drivers/io/time_source.hpp"

namespace lanewright {

class Workers {
  public:
    Workers(TimeSource& time, unsigned threads);  // at least one
    ~Workers();
    Workers(const Workers&) = delete;
    Workers& operator=(const Workers&) = delete;

    // Runs the job on the pool and resumes on the io thread. The job must not throw.
    boost::asio::awaitable<void> run_there(std::function<void()> job);

  private:
    struct Pool;
    TimeSource& time_;
    std::unique_ptr<Pool> pool_;
};

// The coroutine behind compute().
template <class F>
boost::asio::awaitable<std::invoke_result_t<F&>> compute_on(Workers* workers, F job) {
    using Value = std::invoke_result_t<F&>;
    using Held = std::conditional_t<std::is_void_v<Value>, std::monostate, Value>;
    struct Call {
        explicit Call(F its_job) : job(std::move(its_job)) {}
        F job;
        std::variant<std::exception_ptr, Held> outcome;
        void run() {
            try {
                if constexpr (std::is_void_v<Value>) {
                    job();
                    outcome.template emplace<1>();
                } else {
                    outcome.template emplace<1>(job());
                }
            } catch (...) {
                outcome.template emplace<0>(std::current_exception());
            }
        }
    };
    const auto call = std::make_shared<Call>(std::move(job));
    std::function<void()> there = [call] { call->run(); };
    co_await workers->run_there(std::move(there));
    if (const auto* error = std::get_if<0>(&call->outcome)) std::rethrow_exception(*error);
    if constexpr (!std::is_void_v<Value>) co_return std::get<1>(std::move(call->outcome));
}

// Runs `job` on the pool and gives its value, or throws its exception, on the io thread. Virtual
// time stands still meanwhile. There is no deadline: a job is expected to end.
template <class F>
boost::asio::awaitable<std::invoke_result_t<F&>> compute(Workers& workers, F job) {
    return compute_on(&workers, std::move(job));
}

}  // namespace lanewright
