#pragma once
// Purpose:   numbers in and out of bytes: little-endian words and varints (drivers/framed.md 1).
// Ownership: a ByteReader points into the caller's bytes and must not outlive them.
// Threads:   no shared state.

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <vector>

namespace lanewright {

void put_u8(std::vector<std::byte>& to, std::uint8_t value);
void put_u16(std::vector<std::byte>& to, std::uint16_t value);
void put_u32(std::vector<std::byte>& to, std::uint32_t value);
void put_varint(std::vector<std::byte>& to, std::uint32_t value);

// The signed difference, small in either direction as a small number, and back (modulo 2^32).
std::uint32_t zigzag_of_difference(std::uint32_t from, std::uint32_t to);
std::uint32_t add_zigzag(std::uint32_t from, std::uint32_t zigzag);

// Reads from the front. After the first read beyond the end, or a malformed varint, good() is
// false and everything reads as 0.
class ByteReader {
  public:
    explicit ByteReader(std::span<const std::byte> bytes) : rest_(bytes) {}
    std::uint8_t u8();
    std::uint16_t u16();
    std::uint32_t u32();
    std::uint32_t varint();
    bool good() const { return good_; }
    bool at_end() const { return rest_.empty(); }

  private:
    std::span<const std::byte> rest_;
    bool good_ = true;
};

// "0C 01 FF", for messages; the middle of more than `most` bytes is left out.
std::string hex_of(std::span<const std::byte> bytes, std::size_t most = 64);

}  // namespace lanewright
