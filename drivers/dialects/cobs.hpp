#pragma once
// Purpose:   Consistent Overhead Byte Stuffing: any bytes, written without a zero.
// Source:    Cheshire and Baker, IEEE/ACM Transactions on Networking 7(2), 1999.
// Ownership: values only.
// Threads:   no shared state.

#include <cstddef>
#include <optional>
#include <span>
#include <vector>

namespace lanewright {

// Without the delimiter; one byte longer than the data, and one more for each full 254.
std::vector<std::byte> cobs_encode(std::span<const std::byte> data);

// `encoded` without the delimiter. Empty where it holds a zero or a block is cut short. A last
// full block may stand with or without an empty block behind it.
std::optional<std::vector<std::byte>> cobs_decode(std::span<const std::byte> encoded);

}  // namespace lanewright
