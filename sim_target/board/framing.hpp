#pragma once
// Purpose:   frames on the board's side of the wire, as drivers/framed.md sections 1 and 2 say:
//            COBS, CRC-32C, varints. Shares no code with the host's side, so that one mistake
//            cannot hide itself on both.
// Ownership: values only; a FrameSplitter keeps the unfinished frame.
// Threads:   no shared state.

#include <cstddef>
#include <cstdint>
#include <optional>
#include <span>
#include <string_view>
#include <vector>

namespace lanewright::sim {

using Octets = std::vector<std::uint8_t>;

// RFC 3720, appendix B.4.
std::uint32_t checksum(std::span<const std::uint8_t> data);

// Cheshire and Baker, "Consistent Overhead Byte Stuffing", IEEE/ACM Trans. Networking 7(2), 1999;
// without the delimiter. Empty where the bytes are no COBS.
Octets stuffed(std::span<const std::uint8_t> data);
std::optional<Octets> unstuffed(std::span<const std::uint8_t> data);

// payload -> what goes on the line, with the 00 at its end.
Octets line_bytes_of(std::span<const std::uint8_t> payload);
// What stood between two 00 -> payload; empty for a bad frame.
std::optional<Octets> payload_of(std::span<const std::uint8_t> line_bytes);

// Cuts a stream at its 00. Never holds more than the largest frame.
class FrameSplitter {
  public:
    explicit FrameSplitter(std::size_t largest_payload);
    // Whole frames without their 00, none of them empty; one that is too long counts as bad.
    std::vector<Octets> take(std::span<const std::uint8_t> received);
    std::uint64_t too_long() const { return too_long_; }

  private:
    std::size_t most_;
    Octets frame_;
    bool dropping_ = false;
    std::uint64_t too_long_ = 0;
};

class Writer {
  public:
    void octet(unsigned value) { bytes_.push_back(static_cast<std::uint8_t>(value)); }
    void two(std::uint16_t value);
    void four(std::uint32_t value);
    void varint(std::uint32_t value);
    void append(std::span<const std::uint8_t> more);
    Octets take() { return std::move(bytes_); }

  private:
    Octets bytes_;
};

// Each getter is empty past the end, and for a number that does not fit.
class Reader {
  public:
    explicit Reader(std::span<const std::uint8_t> bytes) : rest_(bytes) {}
    std::optional<std::uint8_t> octet();
    std::optional<std::uint16_t> two();
    std::optional<std::uint32_t> four();
    std::optional<std::uint32_t> varint();
    bool at_end() const { return rest_.empty(); }
    std::span<const std::uint8_t> rest() const { return rest_; }

  private:
    std::span<const std::uint8_t> rest_;
};

}  // namespace lanewright::sim
