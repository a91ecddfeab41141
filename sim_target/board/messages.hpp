#pragma once
// Purpose:   what the payloads mean, on the board's side: drivers/framed.md sections 3 to 5.
// Ownership: values only.
// Threads:   no shared state.

#include <cstdint>
#include <optional>
#include <span>
#include <vector>

#include "sim_target/board/framing.hpp"

namespace lanewright::sim {

enum class Kind : std::uint8_t {
    hello = 0x01,
    batch = 0x02,
    hello_answer = 0x81,
    reply = 0x82,
    error_reply = 0x83
};

struct Hello {
    std::uint8_t attempt = 0, version = 0;
    std::uint32_t session = 0;
};

struct BoardLimits {
    std::uint32_t largest_payload = 1024;
    std::uint32_t slots = 16;
    std::uint32_t most_operations = 256;
    std::uint32_t longest_wait_us = 60'000'000;
    std::uint32_t sessions = 4;
};

struct HelloAnswer {
    Hello hello;
    std::uint32_t boot = 0;
    bool resumed = false;
    BoardLimits limits;
    std::uint32_t bad_frames = 0;
};

enum class Verb : std::uint8_t { read = 0, write = 1, write_and_check = 2, wait = 3, pause = 4 };

struct WireStep {
    Verb verb = Verb::read;
    std::uint32_t address = 0;
    std::optional<std::uint32_t> mask;  // absent: all bits of the register
    std::uint32_t value = 0;
    std::uint32_t time_us = 0;  // of a wait: its timeout
    bool has_result() const { return verb != Verb::write && verb != Verb::pause; }
};

struct BatchHead {
    std::uint32_t slot = 0;
    std::uint16_t count = 0, tag = 0;
    std::uint32_t boot = 0;
};

enum class BatchError : std::uint8_t {
    none = 0,
    other_boot = 1,
    no_session = 2,
    malformed = 3,
    beyond_limit = 4,
    slot_busy = 5,
    behind = 6
};

enum class Outcome : std::uint8_t {
    done = 0,
    no_register = 1,
    no_access = 2,
    beyond_width = 3,
    wait_expired = 4,
    check_failed = 5,
    bus_error = 6
};

std::optional<Hello> decode_hello(std::span<const std::uint8_t> payload);
Octets encode(const HelloAnswer& answer);

// Empty: too short for its head, a bad frame. `operations` is what stands behind the head.
std::optional<BatchHead> decode_head(std::span<const std::uint8_t> payload,
                                     std::span<const std::uint8_t>& operations);
// none, malformed or beyond_limit.
BatchError decode_steps(std::span<const std::uint8_t> operations, const BoardLimits& limits,
                        std::vector<WireStep>& steps);

Octets encode_error(const BatchHead& head, std::uint32_t boot, BatchError error);
// `results` is already encoded.
Octets encode_reply(const BatchHead& head, std::uint32_t boot, Outcome outcome,
                    std::uint32_t failed_at, std::span<const std::uint8_t> results);

}  // namespace lanewright::sim
