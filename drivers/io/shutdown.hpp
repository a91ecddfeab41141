#pragma once
// Purpose:   SIGTERM, SIGINT and SIGHUP as a stop; a second one ends the process at once (75).
// Ownership: keeps the handlers while it lives; refers to the io_context.
// Threads:   io thread.

#include <boost/asio/io_context.hpp>
#include <memory>

#include "drivers/io/signal.hpp"

namespace lanewright {

class ShutdownSignals {
  public:
    // Also ignores SIGPIPE: a reader that went away is a failed write, not a death.
    ShutdownSignals(boost::asio::io_context& io, Stop stop);
    ~ShutdownSignals();
    ShutdownSignals(const ShutdownSignals&) = delete;
    ShutdownSignals& operator=(const ShutdownSignals&) = delete;

    int received() const;  // the number of the first signal; 0: none yet

  private:
    struct State;
    std::shared_ptr<State> state_;
};

}  // namespace lanewright
