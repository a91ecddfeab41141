#pragma once
// Purpose:   one at a time, first come first served: lanes that share a monitor take turns.
// Ownership: a Pass gives the turn back when it is destroyed; it may outlive the Turnstile.
// Threads:   io thread.

#include <boost/asio/io_context.hpp>
#include <memory>

#include "drivers/io/signal.hpp"
#include "drivers/io/task.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright {

class Turnstile {
    struct State;

  public:
    explicit Turnstile(boost::asio::io_context& io);

    class Pass {
      public:
        Pass() = default;  // holds nothing
        Pass(Pass&&) noexcept = default;
        Pass& operator=(Pass&& other) noexcept;
        ~Pass() { leave(); }
        void leave() noexcept;
        bool holds() const { return state_ != nullptr; }

      private:
        friend class Turnstile;
        explicit Pass(std::shared_ptr<State> state) : state_(std::move(state)) {}
        std::shared_ptr<State> state_;
    };

    // Waits for its turn. Fails with Cause::timeout at the deadline, Cause::stopped on a stop.
    Task<Pass> enter(TimeSource& time, TimePoint until, Stop stop);

    std::size_t waiting() const;
    bool taken() const;

  private:
    std::shared_ptr<State> state_;
};

}  // namespace lanewright
