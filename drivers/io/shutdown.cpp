#include "drivers/io/shutdown.hpp"

#include <unistd.h>
#include <boost/asio/signal_set.hpp>
#include <csignal>

namespace lanewright {

namespace {

// What was begun stays as it is; whoever owns lasting notes finds them at the next start.
[[noreturn]] void end_at_once() {
    constexpr char text[] =
        "ended at once by a second signal; what was left undone is mended at the next start\n";
    [[maybe_unused]] const auto written = ::write(STDERR_FILENO, text, sizeof text - 1);
    constexpr int try_again = 75;  // sysexits.h, EX_TEMPFAIL
    ::_exit(try_again);
}

}  // namespace

struct ShutdownSignals::State : std::enable_shared_from_this<State> {
    State(boost::asio::io_context& io, Stop its_stop)
        : signals(io, SIGTERM, SIGINT, SIGHUP), stop(std::move(its_stop)) {}
    boost::asio::signal_set signals;
    Stop stop;
    int first = 0;

    void listen() {
        signals.async_wait(
            [self = shared_from_this()](const boost::system::error_code& failed, int number) {
                if (failed) return;
                if (self->first != 0) end_at_once();
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
