#include "drivers/io/shutdown.hpp"

#include <unistd.h>
#include <boost/asio/signal_set.hpp>
#include <csignal>

namespace lanewright {

struct ShutdownSignals::State : std::enable_shared_from_this<State> {
    State(boost::asio::io_context& io, Stop its_stop)
        : signals(io, SIGTERM, SIGINT), stop(std::move(its_stop)) {}
    boost::asio::signal_set signals;
    Stop stop;
    int first = 0;

    void listen() {
        signals.async_wait(
            [self = shared_from_this()](const boost::system::error_code& failed, int number) {
                if (failed) return;
                if (self->first != 0) ::_exit(128 + number);
                self->first = number;
                self->stop.request();
                self->listen();
            });
    }
};

ShutdownSignals::ShutdownSignals(boost::asio::io_context& io, Stop stop)
    : state_(std::make_shared<State>(io, std::move(stop))) {
    std::signal(SIGPIPE, SIG_IGN);
    state_->listen();
}

ShutdownSignals::~ShutdownSignals() {
    boost::system::error_code ignored;
    state_->signals.cancel(ignored);
}

int ShutdownSignals::received() const {
    return state_->first;
}

}  // namespace lanewright
