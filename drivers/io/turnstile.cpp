#include "drivers/io/turnstile.hpp"

#include <list>

namespace lanewright {

// One waiting task; `admitted` hands it the turn, whatever its own wait says.
struct InLine {
    InLine(boost::asio::io_context& io, const Stop& stop) : go(io, Signal::Kind::level, stop) {}
    Signal go;
    bool admitted = false;
};

struct Turnstile::State {
    explicit State(boost::asio::io_context& loop) : io(loop) {}
    boost::asio::io_context& io;
    bool taken = false;
    std::list<InLine*> line;

    void give_to_next() {
        if (line.empty()) {
            taken = false;
            return;
        }
        InLine* next = line.front();
        line.pop_front();
        next->admitted = true;
        next->go.raise();
    }
};

Turnstile::Turnstile(boost::asio::io_context& io) : state_(std::make_shared<State>(io)) {}

Turnstile::Pass& Turnstile::Pass::operator=(Pass&& other) noexcept {
    if (this != &other) {
        leave();
        state_ = std::move(other.state_);
    }
    return *this;
}

void Turnstile::Pass::leave() noexcept {
    if (const auto state = std::exchange(state_, nullptr)) state->give_to_next();
}

Task<Turnstile::Pass> Turnstile::enter(TimeSource& time, TimePoint until, Stop stop) {
    const auto state = state_;
    Fault fault;
    if (stop.requested()) {
        fault.cause = Cause::stopped;
        co_return fault;
    }
    if (!state->taken) {
        state->taken = true;
        co_return Pass(state);
    }
    InLine place(state->io, stop);
    state->line.push_back(&place);
    const Woke woke = co_await time.wait(place.go, until);
    // The turn may have come in the same pass of the loop as the deadline: it is not lost.
    if (place.admitted) {
        Pass pass(state);
        if (woke != Woke::stopped) co_return pass;
    } else {
        state->line.remove(&place);
    }
    fault.cause = woke == Woke::stopped ? Cause::stopped : Cause::timeout;
    if (woke == Woke::deadline) fault.what = "another lane holds what this one waits for";
    co_return fault;
}

std::size_t Turnstile::waiting() const {
    return state_->line.size();
}

bool Turnstile::taken() const {
    return state_->taken;
}

}  // namespace lanewright
