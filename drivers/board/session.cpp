// Keeping the connection: opening, greeting, identity, loss and recovery.

#include "drivers/board/session.hpp"

#include <algorithm>
#include <utility>

#include "drivers/board/session_request.hpp"

namespace lanewright {

namespace {

constexpr std::chrono::milliseconds first_pause{100};
constexpr std::chrono::seconds longest_pause{2};
constexpr std::size_t read_bytes = 4096;

}  // namespace

Session::Session(TimeSource& time, std::unique_ptr<Link> link, std::unique_ptr<Dialect> dialect,
                 SessionOptions options, IdentityProbe probe)
    : time_(time),
      link_(std::move(link)),
      dialect_(std::move(dialect)),
      options_(std::move(options)),
      probe_(std::move(probe)),
      tasks_(time.io()),
      stop_(tasks_.stop_of_tasks()),
      event_(time.io(), Signal::Kind::level, stop_),
      readiness_(time.io(), Signal::Kind::level, stop_),
      link_up_(time.io(), Signal::Kind::level, stop_),
      outgoing_(time.io(), Signal::Kind::level, stop_),
      timer_(time.io(), Signal::Kind::level, stop_) {
    received_.resize(read_bytes);
    options_.attempts = std::max(1, options_.attempts);
    last_trouble_ = fault_of(Cause::unreachable, "the board was not opened");
}

Session::~Session() = default;

Fault Session::fault_of(Cause cause, std::string what) const {
    Fault fault;
    fault.cause = cause;
    fault.what = std::move(what);
    fault.board = options_.board;
    return fault;
}

void Session::become(State state) {
    if (state_ == State::ready && state != State::ready) not_ready_since_ = time_.now();
    if (state == State::greeting) sent_before_greeting_ = dialect_->counts().frames_sent;
    state_ = state;
    readiness_.raise();
    readiness_.lower();
}

TimePoint Session::end_of_patience() const {
    return state_ == State::ready ? TimePoint::max() : not_ready_since_ + options_.patience;
}

bool Session::patience_is_over() const {
    return time_.now() >= end_of_patience();
}

// For a greeting and the identity, with every attempt of both.
std::chrono::nanoseconds Session::greeting_time() const {
    return options_.attempts * (options_.answer_time + allowance(probe_.batch));
}

Task<void> Session::open() {
    if (started_ || state_ == State::closed) {
        co_return fault_of(Cause::internal, "a session is opened once");
    }
    not_ready_since_ = time_.now();
    tasks_.spawn("read the link", read_link());
    tasks_.spawn("write the link", write_link());
    tasks_.spawn("keep time", keep_time());
    Result<void> connected = co_await connect();
    if (!connected) {
        Fault fault = connected.error();
        const Result<void> closed = co_await close();
        if (!closed) fault.hint = closed.error().text();
        co_return fault;
    }
    started_ = true;
    tasks_.spawn("keep connected", keep_connected());
    co_return Result<void>{};
}

Task<void> Session::close() {
    if (state_ != State::closed) become(State::closed);
    tasks_.stop();
    link_->close();
    const Result<void> ended = co_await tasks_.join();
    // Being stopped is what was asked for.
    if (!ended && ended.error().cause != Cause::stopped) co_return ended.error();
    co_return Result<void>{};
}

Task<void> Session::connect() {
    Result<void> gone = co_await let_go_of_link();
    if (!gone) co_return gone.error();
    Result<void> opened = co_await open_link();
    if (!opened) co_return opened.error();
    co_return co_await qualify();
}

// Closes the link and waits until reader and writer have seen it: only then may it be opened anew.
Task<void> Session::let_go_of_link() {
    drop_link();
    while (reading_ || writing_) {
        const TimePoint soon = time_.now() + options_.open_time;
        const Woke woke = co_await time_.wait(event_, soon);
        event_.lower();
        if (woke == Woke::stopped) co_return fault_of(Cause::stopped, "the session was closed");
        if (woke == Woke::deadline) {
            co_return fault_of(Cause::unreachable, "the link does not let go of a read or write");
        }
    }
    co_return Result<void>{};
}

void Session::drop_link() {
    dropped_ = reading_;
    link_->close();
    dialect_->link_lost();
    disarm_all();
}

Task<void> Session::open_link() {
    Result<void> opened = co_await link_->open(time_.now() + options_.open_time);
    if (stop_.requested()) {
        link_->close();
        co_return fault_of(Cause::stopped, "the session was closed");
    }
    if (!opened) {
        Fault fault = opened.error();
        if (fault.board.empty()) fault.board = options_.board;
        co_return fault;
    }
    ++opened_;
    greeted_ = false;
    hopeless_.reset();
    to_send_.clear();
    last_heard_ = time_.now();
    reading_ = true;
    link_up_.raise();
    become(State::greeting);
    dialect_->link_reopened();
    carry_out(dialect_->step({}, time_.now()));
    co_return Result<void>{};
}

Task<void> Session::wait_for_greeting(TimePoint deadline) {
    const TimePoint began = time_.now();
    while (!greeted_) {
        if (hopeless_) co_return *hopeless_;
        if (!link_->is_open()) co_return last_trouble_;
        const Woke woke = co_await time_.wait(event_, deadline);
        event_.lower();
        if (woke == Woke::stopped) co_return fault_of(Cause::stopped, "the session was closed");
        if (woke == Woke::deadline && !greeted_) {
            Fault fault = fault_of(Cause::timeout, "the board does not answer the " +
                                                       dialect_->traits().name + " greeting on " +
                                                       link_->traits().name);
            const DialectCounts& counts = dialect_->counts();
            fault.attempts = static_cast<int>(counts.frames_sent - sent_before_greeting_);
            fault.attempt = fault.attempts;
            const std::uint64_t bad = counts.bad_frames;
            fault.hint = bad > 0 ? std::to_string(bad) +
                                       " frames came that cannot be read: check "
                                       "the dialect, the baud rate and what else uses the line"
                                 : "Check power, cable, and the link in the board file";
            fault.waited = time_.now() - began;
            co_return fault;
        }
    }
    co_return Result<void>{};
}

// Greeting, identity, admission. Begins again when the board greets anew meanwhile.
Task<void> Session::qualify() {
    const TimePoint deadline = time_.now() + greeting_time();
    for (;;) {
        Result<void> greeted = co_await wait_for_greeting(deadline);
        if (!greeted) co_return greeted.error();
        greeted_ = false;
        if (!probe_.batch.empty()) {
            RequestPtr request = submit(board_wide, probe_.batch, Urgency::identity);
            Result<BatchReply> reply = co_await attend(request, deadline);
            const bool reset = !reply && reply.error().cause == Cause::board_reset;
            if (reset || greeted_) continue;
            if (!reply) co_return reply.error();
            Result<void> right = probe_.check(*reply);
            if (!right) {
                Fault fault = right.error();
                fault.board = options_.board;
                co_return fault;
            }
        }
        carry_out(dialect_->admit(time_.now()));
        become(State::ready);
        arm_all();
        co_return Result<void>{};
    }
}

Task<void> Session::keep_connected() {
    for (;;) {
        const Woke woke = co_await time_.wait(event_, TimePoint::max());
        event_.lower();
        if (woke == Woke::stopped) co_return Result<void>{};
        if (link_->is_open() && !greeted_ && !hopeless_) continue;
        Result<void> recovered = co_await recover();
        if (!recovered) co_return Result<void>{};  // only a stop ends it
    }
}

// Tries until the board is ready again; those who wait for it lose patience on their own.
Task<void> Session::recover() {
    std::chrono::nanoseconds pause = first_pause;
    become(link_->is_open() ? State::greeting : State::down);
    for (;;) {
        Result<void> outcome;
        if (link_->is_open() && !hopeless_) {
            outcome = co_await qualify();
        } else {
            outcome = co_await connect();
        }
        if (outcome) co_return Result<void>{};
        if (outcome.error().cause == Cause::stopped) co_return outcome.error();
        last_trouble_ = outcome.error();
        // A silent serial board is greeted on: opening the port anew could reset it.
        const bool silent = last_trouble_.cause == Cause::timeout;
        if (!silent || link_->traits().after_deadline == AfterDeadline::reconnect) drop_link();
        become(link_->is_open() ? State::greeting : State::down);
        const Woke woke = co_await time_.sleep_until(time_.now() + pause, stop_);
        if (woke == Woke::stopped) co_return fault_of(Cause::stopped, "the session was closed");
        pause = std::min<std::chrono::nanoseconds>(2 * pause, longest_pause);
    }
}

Task<void> Session::read_link() {
    for (;;) {
        const Woke woke = co_await time_.wait(link_up_, TimePoint::max());
        if (woke == Woke::stopped) co_return Result<void>{};
        for (;;) {
            Result<std::size_t> got = co_await link_->read_some(received_);
            if (!got) {
                if (!dropped_) {  // else it is known why, and better
                    last_trouble_ = got.error();
                    last_trouble_.board = options_.board;
                }
                break;
            }
            const auto good = dialect_->counts().frames_received;
            DialectStep step =
                dialect_->step(std::span<const std::byte>(received_).first(*got), time_.now());
            if (dialect_->counts().frames_received > good) last_heard_ = time_.now();
            carry_out(std::move(step));
        }
        reading_ = false;
        link_up_.lower();
        drop_link();
        event_.raise();
    }
}

Task<void> Session::write_link() {
    for (;;) {
        const Woke woke = co_await time_.wait(outgoing_, TimePoint::max());
        outgoing_.lower();
        if (woke == Woke::stopped) co_return Result<void>{};
        while (!to_send_.empty() && link_->is_open()) {
            writing_ = true;
            Bytes bytes;
            bytes.swap(to_send_);
            Result<void> written = co_await link_->write(std::move(bytes));
            writing_ = false;
            if (!written) link_->close();  // the reader sees it and says so
            event_.raise();
        }
    }
}

Task<void> Session::keep_time() {
    for (;;) {
        const Woke woke = co_await time_.wait(timer_, call_again_.value_or(TimePoint::max()));
        timer_.lower();
        if (woke == Woke::stopped) co_return Result<void>{};
        if (!call_again_ || time_.now() < *call_again_) continue;
        call_again_.reset();
        if (link_->is_open()) carry_out(dialect_->step({}, time_.now()));
    }
}

void Session::carry_out(DialectStep step) {
    if (!step.send.empty() && link_->is_open()) {
        to_send_.insert(to_send_.end(), step.send.begin(), step.send.end());
        outgoing_.raise();
    }
    for (const Ticket ticket : step.started) {
        const auto found = requests_.find(static_cast<std::uint64_t>(ticket));
        if (found == requests_.end()) continue;
        found->second->started = true;
        arm(*found->second);
    }
    if (step.board_said) {
        if (step.board_said->reset) ++resets_;
        if (step.board_said->greeted) {
            board_bad_frames_ = step.board_said->bad_frames;
            greeted_ = true;
        }
    }
    for (Finished& finished : step.finished) finish(std::move(finished));
    if (step.hopeless) {
        hopeless_ = std::move(step.hopeless);
        hopeless_->board = options_.board;
    }
    if (step.board_said || hopeless_) event_.raise();
    if (call_again_ != step.call_again) {
        call_again_ = step.call_again;
        timer_.raise();
    }
}

SessionStatistics Session::statistics() const {
    SessionStatistics out;
    const DialectCounts& counts = dialect_->counts();
    out.frames = counts.frames_sent + counts.frames_received;
    out.bad_frames = counts.bad_frames;
    out.retries = retries_;
    out.reconnects = opened_ > 0 ? opened_ - 1 : 0;
    out.resets = resets_;
    out.board_bad_frames = board_bad_frames_;
    return out;
}

}  // namespace lanewright
