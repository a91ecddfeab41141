#pragma once
// Purpose:   CRC-32C of some bytes (RFC 3720, appendix B.4).
// Ownership: none.
// Threads:   no shared state.

#include <cstddef>
#include <cstdint>
#include <span>

namespace lanewright {

std::uint32_t crc32c(std::span<const std::byte> data);

}  // namespace lanewright
