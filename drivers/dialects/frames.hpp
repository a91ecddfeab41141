#pragma once
// Purpose:   frames on a byte stream: payload, CRC-32C, COBS, a zero behind (drivers/framed.md 2).
// Ownership: values only; a FrameReader holds the frame that is still arriving.
// Threads:   one thread at a time per FrameReader.

#include <cstddef>
#include <cstdint>
#include <span>
#include <vector>

namespace lanewright {

// A frame with its closing zero.
std::vector<std::byte> frame_of(std::span<const std::byte> payload);

class FrameReader {
  public:
    explicit FrameReader(std::size_t largest_payload) { set_largest(largest_payload); }

    // The payloads of the good frames that end in `received`. Whatever else stands between two
    // zeros is dropped and counted as one bad frame.
    std::vector<std::vector<std::byte>> feed(std::span<const std::byte> received);

    // Forgets what has arrived of a frame.
    void reset();

    void set_largest(std::size_t largest_payload);

    std::uint64_t good() const { return good_; }
    std::uint64_t bad() const { return bad_; }
    void count_bad() { ++bad_; }  // a frame that only its content shows to be bad

  private:
    void end_of_frame(std::vector<std::vector<std::byte>>& payloads);

    std::vector<std::byte> arriving_;
    std::size_t largest_encoded_ = 0;
    bool too_long_ = false;
    std::uint64_t good_ = 0, bad_ = 0;
};

}  // namespace lanewright
