#include "drivers/io/signal.hpp"

#include <algorithm>
#include <boost/asio/post.hpp>

#include "drivers/io/signal_state.hpp"

namespace lanewright {

namespace detail {

void SignalState::wake_all(Woke why) {
    for (Waiter* waiter : waiters) waiter->wake(why);
}

void SignalState::raise() {
    if (kind == Signal::Kind::level) {
        count = 1;
        wake_all(Woke::signalled);
        return;
    }
    const auto asleep = std::find_if(waiters.begin(), waiters.end(),
                                     [](const Waiter* waiter) { return !waiter->woke; });
    if (asleep == waiters.end()) {
        ++count;
    } else {
        (*asleep)->wake(Woke::signalled);
    }
}

std::optional<Woke> SignalState::ready() {
    if (gone || (stop && stop->requested)) return Woke::stopped;
    if (count == 0) return std::nullopt;
    if (kind == Signal::Kind::counted) --count;
    return Woke::signalled;
}

void StopState::request() {
    if (requested.exchange(true)) return;
    for (const auto& weak : std::exchange(signals, {})) {
        if (const auto signal = weak.lock()) signal->wake_all(Woke::stopped);
    }
    for (const auto& weak : std::exchange(children, {})) {
        if (const auto child = weak.lock()) child->request();
    }
}

Waiter::Waiter(std::shared_ptr<SignalState> its_signal)
    : signal(std::move(its_signal)),
      event(signal->io, boost::asio::steady_timer::time_point::max()),
      place(signal->waiters.insert(signal->waiters.end(), this)) {}

Waiter::~Waiter() {
    signal->waiters.erase(place);
}

void Waiter::wake(Woke why) {
    if (woke) return;
    woke = why;
    event.cancel();
}

// Handles that have gone are cleared out now and then, so that a long-lived Stop stays small.
template <class T>
void add_watched(std::vector<std::weak_ptr<T>>& list, const std::shared_ptr<T>& item) {
    if (list.size() == list.capacity()) {
        std::erase_if(list, [](const std::weak_ptr<T>& weak) { return weak.expired(); });
    }
    list.push_back(item);
}

}  // namespace detail

Stop::Stop(boost::asio::io_context& io) : state_(std::make_shared<detail::StopState>(io)) {}

void Stop::request() {
    state_->request();
}

bool Stop::requested() const {
    return state_->requested;
}

void Stop::post_request() {
    boost::asio::post(state_->io, [state = state_] { state->request(); });
}

Stop Stop::child() const {
    auto state = std::make_shared<detail::StopState>(state_->io);
    if (requested()) {
        state->request();
    } else {
        detail::add_watched(state_->children, state);
    }
    return Stop(std::move(state));
}

void Poster::operator()() const {
    if (state_.expired()) return;
    boost::asio::post(*io_, [weak = state_] {
        if (const auto state = weak.lock()) state->raise();
    });
}

Signal::Signal(boost::asio::io_context& io, Kind kind)
    : state_(std::make_shared<detail::SignalState>(io, kind)) {}

Signal::Signal(boost::asio::io_context& io, Kind kind, const Stop& stop) : Signal(io, kind) {
    state_->stop = stop.state_;
    if (!stop.requested()) detail::add_watched(stop.state_->signals, state_);
}

Signal::~Signal() {
    state_->gone = true;
    state_->wake_all(Woke::stopped);
}

void Signal::raise() {
    state_->raise();
}

void Signal::lower() {
    state_->count = 0;
}

bool Signal::raised() const {
    return state_->count > 0;
}

Poster Signal::poster() const {
    return Poster(&state_->io, state_);
}

}  // namespace lanewright
