#include "drivers/faults/fault.hpp"

#include <utility>

namespace lanewright {

const char* name_of(Cause cause) {
    switch (cause) {
        case Cause::none:
            return "none";
        case Cause::unreachable:
            return "unreachable";
        case Cause::timeout:
            return "timeout";
        case Cause::outcome_unknown:
            return "outcome unknown";
        case Cause::board_reset:
            return "board reset";
        case Cause::refused:
            return "refused by the board";
        case Cause::not_accepted:
            return "write not accepted";
        case Cause::codes_changed:
            return "codes changed";
        case Cause::wait_expired:
            return "wait expired";
        case Cause::wrong_board:
            return "wrong board";
        case Cause::not_allowed:
            return "not allowed";
        case Cause::busy:
            return "busy";
        case Cause::bad_config:
            return "bad configuration";
        case Cause::no_permission:
            return "no permission";
        case Cause::io:
            return "input/output";
        case Cause::not_fit:
            return "not fit to measure";
        case Cause::stopped:
            return "stopped";
        case Cause::bad_data:
            return "bad data";
        case Cause::diverged:
            return "diverged";
        case Cause::internal:
            return "internal";
    }
    return "unknown";
}

std::string Fault::text() const {
    std::string out = what.empty() ? name_of(cause) : what;
    std::string where;
    const auto add = [&where](const std::string& part) {
        if (part.empty()) return;
        if (!where.empty()) where += ", ";
        where += part;
    };
    if (!board.empty()) add("board " + board);
    if (lane) add("lane " + std::to_string(number(*lane)));
    if (!reg.empty()) add("register " + reg);
    if (attempts > 0) add("attempt " + std::to_string(attempt) + " of " + std::to_string(attempts));
    if (waited.count() > 0) {
        add("waited " +
            std::to_string(std::chrono::duration_cast<std::chrono::milliseconds>(waited).count()) +
            " ms");
    }
    if (!sent_hex.empty()) add("sent " + sent_hex);
    if (!received_hex.empty()) add("received " + received_hex);
    if (!where.empty()) out += " (" + where + ")";
    if (!hint.empty()) out += ". " + hint;
    return out;
}

FaultError::FaultError(Fault fault) : std::runtime_error(fault.text()), fault_(std::move(fault)) {}

void throw_exception_from_error(const Fault& fault, const boost::source_location&) {
    throw FaultError(fault);
}

}  // namespace lanewright
