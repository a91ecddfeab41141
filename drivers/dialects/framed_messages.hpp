#pragma once
// Purpose:   the payloads of the framed dialect (drivers/framed.md 3 to 5), the host's side.
// Ownership: values only.
// Threads:   no shared state.

#include <cstddef>
#include <cstdint>
#include <optional>
#include <span>
#include <variant>
#include <vector>

#include "drivers/registers/batch.hpp"

namespace lanewright::framed {

constexpr std::uint8_t version = 1;

struct Hello {
    std::uint8_t try_number = 0;
    std::uint32_t session = 0;
};

struct HelloAnswer {
    std::uint8_t try_number = 0;
    std::uint8_t version = 0;
    std::uint32_t session = 0;
    std::uint32_t boot = 0;
    bool resumed = false;
    std::uint32_t largest_payload = 0, slots = 0, most_operations = 0, longest_wait_us = 0;
    std::uint32_t sessions = 0, bad_frames = 0;
};

struct Head {
    std::uint32_t slot = 0;
    std::uint16_t count = 0, tag = 0;
    std::uint32_t boot = 0;
};

struct Reply {
    Head head;
    std::vector<std::byte> content;  // outcome and results, to be read beside the batch
};

enum class Error : std::uint8_t {
    wrong_boot = 1,
    no_session = 2,
    malformed = 3,
    beyond_limit = 4,
    slot_busy = 5,
    behind = 6
};

struct ErrorReply {
    Head head;
    Error error{};
};

using BoardMessage = std::variant<HelloAnswer, Reply, ErrorReply>;

std::vector<std::byte> encode(const Hello& hello);
std::vector<std::byte> encode(const Head& head, const Batch& batch);

// Empty for anything that a board does not send, or that breaks the page's rules.
std::optional<BoardMessage> decode(std::span<const std::byte> payload);

// Empty where the content does not fit the batch: results missing, left over, or too wide.
std::optional<BatchReply> decode_content(std::span<const std::byte> content, const Batch& batch);

// Payload bytes of the longest reply that the batch can have.
std::size_t longest_reply(const Batch& batch);

}  // namespace lanewright::framed
