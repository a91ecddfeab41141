#pragma once
// Purpose:   the only source of time: now, waits with a deadline, alarms, and the run loop.
//            The steady one is the machine's clock; the virtual one jumps to the next deadline
//            when nothing is ready, so that hours of bench run in seconds over in-memory links.
// Ownership: outlives everything that waits on it; refers to the io_context it was made with.
// Threads:   io thread, except hold and release (any thread).
//
// Use:       boost::asio::io_context io;
//            SteadyTimeSource time(io);              // or VirtualTimeSource
//            auto result = run_until_done(time, some_task());

#include <atomic>
#include <boost/asio/awaitable.hpp>
#include <boost/asio/co_spawn.hpp>
#include <boost/asio/io_context.hpp>
#include <boost/asio/steady_timer.hpp>
#include <chrono>
#include <exception>
#include <functional>
#include <map>
#include <memory>
#include <optional>

#include "drivers/io/signal.hpp"
#include "drivers/io/task.hpp"

namespace lanewright {

class Alarm;

class TimeSource {
  public:
    virtual ~TimeSource();
    TimeSource(const TimeSource&) = delete;
    TimeSource& operator=(const TimeSource&) = delete;

    virtual TimePoint now() const = 0;

    // Waits until the signal is raised (`signalled`; takes one count of a counted signal), the
    // time has come (`deadline`) or the signal's stop is requested (`stopped`, also where the
    // signal is raised too: nothing is taken then). TimePoint::max() waits without end. The
    // signal may be destroyed meanwhile.
    boost::asio::awaitable<Woke> wait(Signal& signal, TimePoint until);

    // `deadline`, or `stopped` at once when the stop is requested.
    boost::asio::awaitable<Woke> sleep_until(TimePoint until, Stop stop);
    // The same without a stop: only for short pauses.
    boost::asio::awaitable<void> sleep_until(TimePoint until);

    // Runs the loop until it is out of work or stopped; exceptions of handlers pass through.
    virtual void run() = 0;

    // While work that will post to the loop goes on in another thread, virtual time stands still.
    // Release only after the result has been posted.
    void hold() noexcept { ++holds_; }
    void release() noexcept { --holds_; }

    boost::asio::io_context& io() const { return io_; }

  protected:
    explicit TimeSource(boost::asio::io_context& io) : io_(io) {}
    using Alarms = std::multimap<TimePoint, Alarm*>;
    // The earliest alarm may have changed.
    virtual void alarms_changed() = 0;
    void ring_due();
    bool held() const { return holds_ != 0; }
    const Alarms& alarms() const { return alarms_; }

  private:
    friend class Alarm;
    boost::asio::io_context& io_;
    Alarms alarms_;
    std::atomic<int> holds_{0};
};

// Calls `ring` once on the io thread when the time has come, unless destroyed before.
class Alarm {
  public:
    Alarm(TimeSource& time, TimePoint when, std::function<void()> ring);
    ~Alarm();
    Alarm(const Alarm&) = delete;
    Alarm& operator=(const Alarm&) = delete;

  private:
    friend class TimeSource;
    TimeSource& time_;
    std::function<void()> ring_;
    std::optional<TimeSource::Alarms::iterator> place_;
};

class SteadyTimeSource final : public TimeSource {
  public:
    explicit SteadyTimeSource(boost::asio::io_context& io);
    ~SteadyTimeSource() override;
    TimePoint now() const override { return std::chrono::steady_clock::now(); }
    void run() override;

  private:
    void alarms_changed() override;
    boost::asio::steady_timer timer_;
    TimePoint armed_for_ = TimePoint::max();
    std::shared_ptr<bool> alive_ = std::make_shared<bool>(true);
};

class VirtualTimeSource final : public TimeSource {
  public:
    explicit VirtualTimeSource(boost::asio::io_context& io);
    TimePoint now() const override { return now_; }
    // Throws std::logic_error where every task waits for a signal and no deadline is left.
    void run() override;

  private:
    void alarms_changed() override {}
    void nothing_ready();
    TimePoint now_;
};

// Runs the loop until the task has finished and gives its result; an exception of the task is
// thrown here. Tasks that it left behind stay where they are.
template <class T>
Result<T> run_until_done(TimeSource& time, Task<T> task) {
    std::optional<Result<T>> outcome;
    std::exception_ptr error;
    auto& io = time.io();
    io.restart();
    boost::asio::co_spawn(io, std::move(task),
                          [&](const std::exception_ptr& thrown, Result<T> result) {
                              if (thrown) {
                                  error = thrown;
                              } else {
                                  outcome.emplace(std::move(result));
                              }
                              io.stop();
                          });
    time.run();
    if (error) std::rethrow_exception(error);
    if (!outcome) throw std::logic_error("the loop ended before its main task");
    return std::move(*outcome);
}

}  // namespace lanewright
