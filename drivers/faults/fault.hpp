#pragma once
// Purpose:   what went wrong at the board, as a value: few causes, each with its own reaction.
// Ownership: values only.
// Threads:   no shared state.

#include <boost/system/result.hpp>
#include <chrono>
#include <cstdint>
#include <optional>
#include <stdexcept>
#include <string>

#include "adapt/values/values.hpp"

namespace lanewright {

using TimePoint = std::chrono::steady_clock::time_point;

// A cause stands on its own only where a caller reacts to it on its own.
enum class Cause : std::uint8_t {
    none,
    unreachable,      // the link cannot be opened, or is gone: reconnect, later 69
    timeout,          // no answer within the deadline, after every attempt
    outcome_unknown,  // sent, and nobody can say whether it was carried out
    board_reset,      // the boot number changed: codes are at reset values
    refused,          // the board answered with an error: wrong address, wrong operation
    not_accepted,     // a write read back as something else
    codes_changed,    // a code was as written and no longer is: something else writes it
    wait_expired,     // a board-side wait came to its end without its condition
    wrong_board,      // identity differs from the board file
    not_allowed,      // outside the board file's roles and limits
    busy,             // another process holds the port, the board or the store
    bad_config,       // the files ask for what cannot be: 78
    no_permission,    // 77
    io,               // store or file system: 74
    not_fit,          // board or bench is not fit to measure on: a preflight item failed, 76
    stopped,          // a stop was asked for
    bad_data,         // what was named does not exist or cannot be read: 65
    diverged,         // a resumed run would not repeat what is stored
    internal          // a broken invariant of ours: 70
};

const char* name_of(Cause cause);

struct Fault {
    Cause cause = Cause::none;
    std::string what;  // one sentence: what happened, what was expected
    std::string board;
    std::string reg;  // register, or register.field
    std::optional<Lane> lane;
    std::string sent_hex, received_hex;
    std::string hint;  // what to do
    int attempt = 0, attempts = 0;
    std::chrono::nanoseconds waited{};

    // All of it in one readable line: what, where, after how long, what to do.
    std::string text() const;
};

// Result<T>::value() on a fault throws this; used only at start-up and in tests.
class FaultError : public std::runtime_error {
  public:
    explicit FaultError(Fault fault);
    const Fault& fault() const { return fault_; }

  private:
    Fault fault_;
};

[[noreturn]] void throw_exception_from_error(const Fault& fault, const boost::source_location&);

template <class T>
using Result = boost::system::result<T, Fault>;  // T must be default-constructible (co_spawn)

}  // namespace lanewright
