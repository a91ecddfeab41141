#include "drivers/dialects/crc32c.hpp"

#include <boost/crc.hpp>

namespace lanewright {

std::uint32_t crc32c(std::span<const std::byte> data) {
    boost::crc_optimal<32, 0x1EDC6F41, 0xFFFFFFFF, 0xFFFFFFFF, true, true> crc;
    crc.process_bytes(data.data(), data.size());
    return static_cast<std::uint32_t>(crc.checksum());
}

}  // namespace lanewright
