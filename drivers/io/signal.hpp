#pragma once
// Purpose:   how one task wakes another, and how a stop reaches every wait.
// Ownership: Signal and Stop are handles on shared state. A Stop may be copied into coroutines;
//            a Signal is not copied, but a Poster made from it may outlive it.
// Threads:   everything on the io thread, except Poster and Stop::requested (any thread).
// Waiting is done by TimeSource::wait (time_source.hpp): every wait has a deadline.

#include <boost/asio/io_context.hpp>
#include <cstdint>
#include <memory>

namespace lanewright {

// Why a wait ended: three different results.
enum class Woke : std::uint8_t { signalled, deadline, stopped };

class Signal;
class TimeSource;

namespace detail {
struct SignalState;
struct StopState;
}  // namespace detail

// A stop is a value that is polled at safe points, and wakes every wait on a Signal bound to it.
// Copies share one state. It is never taken back.
class Stop {
  public:
    explicit Stop(boost::asio::io_context& io);
    void request();          // io thread; a second call does nothing
    bool requested() const;  // any thread
    void post_request();     // any thread
    Stop child() const;      // stopped with its parent, or alone

  private:
    friend class Signal;
    friend class TimeSource;
    explicit Stop(std::shared_ptr<detail::StopState> state) : state_(std::move(state)) {}
    std::shared_ptr<detail::StopState> state_;
};

// Raises a signal from any thread; does nothing once the Signal is gone.
class Poster {
  public:
    void operator()() const;

  private:
    friend class Signal;
    Poster(boost::asio::io_context* io, std::weak_ptr<detail::SignalState> state)
        : io_(io), state_(std::move(state)) {}
    boost::asio::io_context* io_;
    std::weak_ptr<detail::SignalState> state_;
};

class Signal {
  public:
    // level:   stays raised until lowered; every wait returns at once meanwhile.
    // counted: each raise() ends one wait, now or later, first come first served.
    enum class Kind : std::uint8_t { level, counted };

    explicit Signal(boost::asio::io_context& io, Kind kind = Kind::level);
    // Waits also end, as `stopped`, when that stop is requested.
    Signal(boost::asio::io_context& io, Kind kind, const Stop& stop);
    ~Signal();  // waits still going on end as `stopped`
    Signal(const Signal&) = delete;
    Signal& operator=(const Signal&) = delete;

    void raise();
    void lower();  // a counted signal loses all it had counted
    bool raised() const;
    Poster poster() const;

  private:
    friend class TimeSource;
    std::shared_ptr<detail::SignalState> state_;
};

}  // namespace lanewright
