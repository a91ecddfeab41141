#pragma once
// Purpose:   one request of a session that is under way. For session*.cpp only.
// Ownership: shared by the session and the coroutine that attends to it.
// Threads:   io thread.

#include <optional>
#include <utility>

#include "drivers/board/session.hpp"

namespace lanewright {

struct Session::Request {
    Request(boost::asio::io_context& io, const Stop& stop, Batch its_batch)
        : batch(std::move(its_batch)), changed(io, Signal::Kind::level, stop) {}

    Ticket ticket{};
    Lane lane{};
    Batch batch;
    Urgency urgency = Urgency::ordinary;
    Signal changed;  // raised when the result is there or the attempt's end has moved
    std::optional<Result<BatchReply>> result;
    int attempt = 1;
    bool started = false;  // the dialect has sent it
    TimePoint submitted{}, attempt_started{};
    TimePoint attempt_until = TimePoint::max();
};

}  // namespace lanewright
