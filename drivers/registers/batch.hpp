#pragma once
// Purpose:   register operations that are carried out together, and what came of them.
// Ownership: values only.
// Threads:   no shared state.
// A Batch is filled by RegisterMap alone, so that a write which the board file does not allow
// cannot be expressed anywhere else in the program.

#include <chrono>
#include <cstdint>
#include <optional>
#include <span>
#include <variant>
#include <vector>

namespace lanewright {

// Masks and values stand in place: bit 0 of a mask is bit 0 of the register.
struct Read {
    std::uint32_t address = 0;
    unsigned width_bits = 32;
    bool operator==(const Read&) const = default;
};

// Puts the masked bits, leaves the others. With read_back the board reads the register at once
// and the batch ends there if the masked bits are not as written.
struct Write {
    std::uint32_t address = 0;
    std::uint32_t mask = 0, value = 0;
    unsigned width_bits = 32;
    bool read_back = false;
    bool operator==(const Write&) const = default;
};

// The batch goes on once the masked bits equal the value, and ends there after the timeout.
struct WaitUntil {
    std::uint32_t address = 0;
    std::uint32_t mask = 0, value = 0;
    unsigned width_bits = 32;
    std::chrono::microseconds timeout{};
    bool operator==(const WaitUntil&) const = default;
};

struct Pause {
    std::chrono::microseconds time{};
    bool operator==(const Pause&) const = default;
};

using Operation = std::variant<Read, Write, WaitUntil, Pause>;

class Batch {
  public:
    std::span<const Operation> operations() const { return operations_; }
    bool empty() const { return operations_.empty(); }
    std::size_t size() const { return operations_.size(); }

    // False once it holds a write that starts or clears something: carrying it out twice is then
    // not the same as once.
    bool repeatable() const { return repeatable_; }

    // The longest that its own pauses and waits can take.
    std::chrono::microseconds longest() const;

  private:
    friend class RegisterMap;
    std::vector<Operation> operations_;
    bool repeatable_ = true;
};

enum class Outcome : std::uint8_t {
    done,
    no_register,     // nothing at that address
    no_access,       // the register cannot be read, or cannot be written
    beyond_width,    // value or mask has bits that the register lacks
    wait_expired,    // the wait's time was over without its condition
    not_as_written,  // read back otherwise than written
    bus_error        // the board could not reach the register
};

struct BatchReply {
    Outcome outcome = Outcome::done;
    std::size_t failed_at = 0;  // the operation that ended the batch, where outcome is not done
    // One for every operation; empty where it has no result or was not begun. A read gives the
    // whole register, a read-back and a wait the masked bits, all in place.
    std::vector<std::optional<std::uint32_t>> results;
    bool operator==(const BatchReply&) const = default;
};

// Whether the operation has a result in the reply.
bool has_result(const Operation& operation);

}  // namespace lanewright
