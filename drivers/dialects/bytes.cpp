#include "drivers/dialects/bytes.hpp"

namespace lanewright {

void put_u8(std::vector<std::byte>& to, std::uint8_t value) {
    to.push_back(static_cast<std::byte>(value));
}

void put_u16(std::vector<std::byte>& to, std::uint16_t value) {
    put_u8(to, static_cast<std::uint8_t>(value & 0xFF));
    put_u8(to, static_cast<std::uint8_t>(value >> 8));
}

void put_u32(std::vector<std::byte>& to, std::uint32_t value) {
    put_u16(to, static_cast<std::uint16_t>(value & 0xFFFF));
    put_u16(to, static_cast<std::uint16_t>(value >> 16));
}

void put_varint(std::vector<std::byte>& to, std::uint32_t value) {
    while (value >= 0x80) {
        put_u8(to, static_cast<std::uint8_t>((value & 0x7F) | 0x80));
        value >>= 7;
    }
    put_u8(to, static_cast<std::uint8_t>(value));
}

std::uint32_t zigzag_of_difference(std::uint32_t from, std::uint32_t to) {
    const std::uint32_t difference = to - from;
    const std::uint32_t sign = (difference >> 31) != 0 ? 0xFFFFFFFFu : 0u;
    return (difference << 1) ^ sign;
}

std::uint32_t add_zigzag(std::uint32_t from, std::uint32_t zigzag) {
    const std::uint32_t sign = (zigzag & 1) != 0 ? 0xFFFFFFFFu : 0u;
    return from + ((zigzag >> 1) ^ sign);
}

std::uint8_t ByteReader::u8() {
    if (!good_ || rest_.empty()) {
        good_ = false;
        return 0;
    }
    const auto value = static_cast<std::uint8_t>(rest_.front());
    rest_ = rest_.subspan(1);
    return value;
}

std::uint16_t ByteReader::u16() {
    const unsigned low = u8();
    const unsigned high = u8();
    return good_ ? static_cast<std::uint16_t>(low | high << 8) : std::uint16_t{0};
}

std::uint32_t ByteReader::u32() {
    const std::uint32_t low = u16();
    const std::uint32_t high = u16();
    return good_ ? low | high << 16 : 0;
}

std::uint32_t ByteReader::varint() {
    std::uint64_t value = 0;
    for (unsigned shift = 0; shift < 35; shift += 7) {
        const std::uint64_t byte = u8();
        value |= (byte & 0x7F) << shift;
        if ((byte & 0x80) != 0) continue;
        if (value > 0xFFFFFFFFu) break;
        return good_ ? static_cast<std::uint32_t>(value) : 0;
    }
    good_ = false;
    return 0;
}

std::string hex_of(std::span<const std::byte> bytes, std::size_t most) {
    static constexpr char digits[] = "0123456789ABCDEF";
    const std::size_t head = bytes.size() > most ? most / 2 : bytes.size();
    const std::size_t tail_from = bytes.size() > most ? bytes.size() - most / 2 : bytes.size();
    std::string out;
    for (std::size_t i = 0; i < bytes.size(); ++i) {
        if (i >= head && i < tail_from) {
            if (i == head) out += " ...";
            continue;
        }
        if (!out.empty()) out += ' ';
        const auto value = static_cast<unsigned>(bytes[i]);
        out += digits[value >> 4];
        out += digits[value & 0xF];
    }
    return out;
}

}  // namespace lanewright
