#pragma once
// Purpose:   what Signal and Stop share with TimeSource::wait; of no use elsewhere.
// Ownership: a Waiter lives in the frame of the waiting coroutine and unlinks itself.
// Threads:   io thread, except StopState::requested.

#include <atomic>
#include <boost/asio/steady_timer.hpp>
#include <list>
#include <memory>
#include <optional>
#include <vector>

#include "drivers/io/signal.hpp"

namespace lanewright::detail {

struct Waiter;

struct SignalState {
    SignalState(boost::asio::io_context& loop, Signal::Kind its_kind) : io(loop), kind(its_kind) {}
    boost::asio::io_context& io;
    Signal::Kind kind;
    std::uint64_t count = 0;  // of a level signal: 0 or 1
    bool gone = false;        // the Signal itself has been destroyed
    std::shared_ptr<StopState> stop;
    std::list<Waiter*> waiters;

    void raise();
    void wake_all(Woke why);
    std::optional<Woke> ready();  // takes one count of a counted signal
};

struct StopState {
    explicit StopState(boost::asio::io_context& loop) : io(loop) {}
    boost::asio::io_context& io;
    std::atomic<bool> requested{false};
    std::vector<std::weak_ptr<SignalState>> signals;
    std::vector<std::weak_ptr<StopState>> children;

    void request();
};

// The timer never expires: it is an event that its cancellation sets.
struct Waiter {
    explicit Waiter(std::shared_ptr<SignalState> its_signal);
    ~Waiter();
    Waiter(const Waiter&) = delete;
    Waiter& operator=(const Waiter&) = delete;
    void wake(Woke why);

    std::shared_ptr<SignalState> signal;
    boost::asio::steady_timer event;
    std::optional<Woke> woke;
    std::list<Waiter*>::iterator place;
};

}  // namespace lanewright::detail
