#include "drivers/io/time_source.hpp"

#include <boost/asio/as_tuple.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <stdexcept>

#include "drivers/io/signal_state.hpp"

namespace lanewright {

namespace asio = boost::asio;

TimeSource::~TimeSource() = default;

asio::awaitable<Woke> TimeSource::wait(Signal& signal, TimePoint until) {
    const auto state = signal.state_;
    if (const auto ready = state->ready()) co_return *ready;
    if (until <= now()) co_return Woke::deadline;
    detail::Waiter waiter(state);
    const Alarm alarm(*this, until, [&waiter] { waiter.wake(Woke::deadline); });
    while (!waiter.woke) co_await waiter.event.async_wait(asio::as_tuple(asio::use_awaitable));
    co_return *waiter.woke;
}

asio::awaitable<Woke> TimeSource::sleep_until(TimePoint until, Stop stop) {
    Signal never(io_, Signal::Kind::level, stop);
    co_return co_await wait(never, until);
}

asio::awaitable<void> TimeSource::sleep_until(TimePoint until) {
    Signal never(io_);
    co_await wait(never, until);
}

void TimeSource::ring_due() {
    while (!alarms_.empty() && alarms_.begin()->first <= now()) {
        Alarm& alarm = *alarms_.begin()->second;
        alarms_.erase(alarms_.begin());
        alarm.place_.reset();
        // The alarm may be destroyed by what it calls.
        const auto ring = std::move(alarm.ring_);
        ring();
    }
}

Alarm::Alarm(TimeSource& time, TimePoint when, std::function<void()> ring)
    : time_(time), ring_(std::move(ring)) {
    if (when == TimePoint::max()) return;
    place_ = time_.alarms_.emplace(when, this);
    if (*place_ == time_.alarms_.begin()) time_.alarms_changed();
}

Alarm::~Alarm() {
    if (!place_) return;
    time_.alarms_.erase(*place_);
    time_.alarms_changed();
}

SteadyTimeSource::SteadyTimeSource(asio::io_context& io) : TimeSource(io), timer_(io) {}

SteadyTimeSource::~SteadyTimeSource() {
    *alive_ = false;
}

void SteadyTimeSource::run() {
    io().run();
}

// A timer that is armed too early is left alone: it rings nothing and is armed anew then. So the
// common case, a deadline that is set and dropped again, costs no change of the timer.
void SteadyTimeSource::alarms_changed() {
    if (alarms().empty()) {
        if (armed_for_ != TimePoint::max()) {
            armed_for_ = TimePoint::max();
            timer_.cancel();
        }
        return;
    }
    const TimePoint earliest = alarms().begin()->first;
    if (armed_for_ <= earliest) return;
    armed_for_ = earliest;
    timer_.expires_at(earliest);
    timer_.async_wait([this, alive = alive_](const boost::system::error_code& failed) {
        if (failed || !*alive) return;
        armed_for_ = TimePoint::max();
        ring_due();
        alarms_changed();
    });
}

VirtualTimeSource::VirtualTimeSource(asio::io_context& io)
    : TimeSource(io), now_(TimePoint{} + std::chrono::hours(1)) {}

void VirtualTimeSource::run() {
    while (!io().stopped()) {
        if (io().poll() == 0 && !io().stopped()) nothing_ready();
    }
}

void VirtualTimeSource::nothing_ready() {
    using namespace std::chrono_literals;
    if (held()) {
        io().run_one_for(1ms);
        return;
    }
    // What was posted before the last hold was released must be seen before time moves.
    if (io().poll() != 0) return;
    if (!alarms().empty()) {
        now_ = std::max(now_, alarms().begin()->first);
        ring_due();
        return;
    }
    // Signals of the operating system and real sockets may still bring something.
    if (io().run_one_for(10s) == 0 && !io().stopped()) {
        throw std::logic_error("virtual time: every task waits and no deadline is left");
    }
}

}  // namespace lanewright
