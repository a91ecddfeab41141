// Requests of a session: submission, attempts, deadlines, and what is said when one fails.

#include <algorithm>
#include <utility>

#include "drivers/board/session.hpp"
#include "drivers/board/session_request.hpp"

namespace lanewright {

Task<BatchReply> Session::run(Lane lane, Batch batch, TimePoint deadline) {
    Result<void> ready = co_await wait_until_ready(deadline);
    if (!ready) {
        Fault fault = ready.error();
        if (lane != board_wide) fault.lane = lane;
        co_return fault;
    }
    if (lane != board_wide) {
        const auto told = resets_told_.try_emplace(lane, resets_).first;
        if (told->second != resets_) co_return told_of_reset(lane);
    }
    std::string why;
    if (!dialect_->fits(batch, why)) {
        Fault fault = fault_of(Cause::refused, "the batch is beyond the board's limits: " + why);
        if (lane != board_wide) fault.lane = lane;
        co_return fault;
    }
    RequestPtr request = submit(lane, std::move(batch), Urgency::ordinary);
    co_return co_await attend(std::move(request), deadline);
}

bool Session::fits(const Batch& batch, std::string& why) const {
    return dialect_->fits(batch, why);
}

Fault Session::told_of_reset(Lane lane) {
    resets_told_[lane] = resets_;
    Fault fault = fault_of(Cause::board_reset, "the board was reset since this lane's last batch");
    fault.lane = lane;
    return fault;
}

Task<void> Session::wait_until_ready(TimePoint deadline) {
    for (;;) {
        if (state_ == State::closed) co_return fault_of(Cause::stopped, "the session was closed");
        if (state_ == State::ready) co_return Result<void>{};
        if (!started_ || patience_is_over() || time_.now() >= deadline) break;
        const Woke woke = co_await time_.wait(readiness_, std::min(deadline, end_of_patience()));
        if (woke == Woke::stopped) co_return fault_of(Cause::stopped, "the session was closed");
    }
    Fault fault = last_trouble_;
    fault.waited = time_.now() - not_ready_since_;
    co_return fault;
}

// Time for one attempt: the board's own waits, the answer, and the line where it is slow.
std::chrono::nanoseconds Session::allowance(const Batch& batch) const {
    std::chrono::nanoseconds time = options_.answer_time + batch.longest();
    const double bytes_per_s = link_->traits().bytes_per_s;
    if (bytes_per_s > 0) {
        double bytes = static_cast<double>(dialect_->line_bytes(batch) + to_send_.size());
        for (const auto& [ticket, other] : requests_) {
            if (other->started) bytes += static_cast<double>(dialect_->line_bytes(other->batch));
        }
        time += std::chrono::duration_cast<std::chrono::nanoseconds>(
            std::chrono::duration<double>(bytes / bytes_per_s));
    }
    return time;
}

std::chrono::nanoseconds Session::longest(const Batch& batch) const {
    return options_.attempts * allowance(batch) + options_.patience;
}

Session::RequestPtr Session::submit(Lane lane, Batch batch, Urgency urgency) {
    auto request = std::make_shared<Request>(time_.io(), stop_, std::move(batch));
    request->ticket = static_cast<Ticket>(next_ticket_++);
    request->lane = lane;
    request->urgency = urgency;
    request->submitted = time_.now();
    requests_[static_cast<std::uint64_t>(request->ticket)] = request;
    // A loss that the reader has yet to notice: what is not sent must not count as sent.
    if (!link_->is_open()) dialect_->link_lost();
    dialect_->submit(request->ticket, request->batch, urgency);
    carry_out(dialect_->step({}, time_.now()));
    return request;
}

void Session::arm(Request& request) {
    request.attempt_started = time_.now();
    request.attempt_until = time_.now() + allowance(request.batch);
    request.changed.raise();
}

void Session::arm_all() {
    for (const auto& [ticket, request] : requests_) {
        if (request->started) arm(*request);
    }
}

// No attempt runs out while the link is gone.
void Session::disarm_all() {
    for (const auto& [ticket, request] : requests_) {
        request->attempt_until = TimePoint::max();
        request->changed.raise();
    }
}

void Session::finish(Finished finished) {
    const auto found = requests_.find(static_cast<std::uint64_t>(finished.ticket));
    if (found == requests_.end()) return;
    const RequestPtr request = found->second;
    requests_.erase(found);
    if (finished.result && request->attempt == 1 && request->batch.longest().count() == 0) {
        round_trips_.add(time_.now() - request->attempt_started);
    }
    const bool reset = !finished.result && finished.result.error().cause == Cause::board_reset;
    if (reset && request->lane != board_wide) resets_told_[request->lane] = resets_;
    if (finished.result) {
        request->result = std::move(finished.result);
    } else {
        request->result = with_circumstances(*request, finished.result.error());
    }
    request->changed.raise();
}

Task<BatchReply> Session::attend(RequestPtr request, TimePoint deadline) {
    const bool ordinary = request->urgency == Urgency::ordinary;
    for (;;) {
        TimePoint until = std::min(request->attempt_until, deadline);
        if (ordinary) until = std::min(until, end_of_patience());
        const Woke woke = co_await time_.wait(request->changed, until);
        request->changed.lower();
        if (request->result) co_return std::move(*request->result);
        if (woke == Woke::stopped) {
            co_return give_up(*request, fault_of(Cause::stopped, "the session was closed"));
        }
        if (ordinary && patience_is_over()) co_return give_up(*request, last_trouble_);
        if (!ordinary && !link_->is_open()) co_return give_up(*request, last_trouble_);
        if (time_.now() >= deadline) {
            co_return give_up(*request, fault_of(Cause::timeout, "the deadline has passed"));
        }
        if (time_.now() < request->attempt_until) continue;
        if (!ask_again(*request)) {
            co_return give_up(*request, fault_of(Cause::timeout, "the board does not answer"));
        }
    }
}

// The one place where anything is tried again. False when every attempt was made.
bool Session::ask_again(Request& request) {
    if (!link_->is_open()) {
        request.attempt_until = TimePoint::max();  // goes on with the next link
        return true;
    }
    if (request.attempt >= options_.attempts) return false;
    ++request.attempt;
    ++retries_;
    // A connection on which nothing at all came back may be dead without knowing it.
    const bool dead = state_ == State::ready && last_heard_ < request.attempt_started &&
                      link_->traits().after_deadline == AfterDeadline::reconnect;
    if (dead) {
        last_trouble_ = fault_of(Cause::timeout, "the board fell silent");
        drop_link();
        return true;
    }
    carry_out(dialect_->again(request.ticket, time_.now()));
    arm(request);
    return true;
}

Result<BatchReply> Session::give_up(Request& request, Fault fault) {
    const bool sent = dialect_->was_sent(request.ticket);
    if (sent) fault.sent_hex = dialect_->sent_hex(request.ticket);
    if (sent && !request.batch.repeatable() && fault.cause != Cause::stopped) {
        fault.what += fault.what.empty() ? "" : ": ";
        fault.what += "whether the batch was carried out is not known";
        fault.cause = Cause::outcome_unknown;
    }
    fault = with_circumstances(request, std::move(fault));
    requests_.erase(static_cast<std::uint64_t>(request.ticket));
    carry_out(dialect_->abandon(request.ticket, time_.now()));
    return fault;
}

Fault Session::with_circumstances(const Request& request, Fault fault) const {
    fault.board = options_.board;
    if (request.lane != board_wide) fault.lane = request.lane;
    fault.attempt = request.attempt;
    fault.attempts = options_.attempts;
    fault.waited = time_.now() - request.submitted;
    return fault;
}

}  // namespace lanewright
