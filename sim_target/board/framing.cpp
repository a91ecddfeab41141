#include "sim_target/board/framing.hpp"

#include <array>

namespace lanewright::sim {

namespace {

constexpr std::array<std::uint32_t, 256> make_table() {
    std::array<std::uint32_t, 256> table{};
    for (std::uint32_t value = 0; value < 256; ++value) {
        std::uint32_t rest = value;
        // The polynomial 1EDC6F41 with its bits in reverse.
        for (int bit = 0; bit < 8; ++bit) rest = (rest >> 1) ^ ((rest & 1) != 0 ? 0x82F63B78u : 0u);
        table[value] = rest;
    }
    return table;
}

constexpr auto table_of_checksum = make_table();
constexpr std::size_t longest_run = 254;
constexpr std::size_t checksum_size = 4;

}  // namespace

std::uint32_t checksum(std::span<const std::uint8_t> data) {
    std::uint32_t rest = 0xFFFFFFFFu;
    for (const std::uint8_t byte : data) {
        rest = (rest >> 8) ^ table_of_checksum[(rest ^ byte) & 0xFFu];
    }
    return ~rest;
}

Octets stuffed(std::span<const std::uint8_t> data) {
    Octets out;
    out.reserve(data.size() + data.size() / longest_run + 1);
    std::size_t start = 0;
    for (;;) {
        std::size_t end = start;
        while (end < data.size() && data[end] != 0 && end - start < longest_run) ++end;
        out.push_back(static_cast<std::uint8_t>(end - start + 1));
        out.insert(out.end(), data.begin() + static_cast<std::ptrdiff_t>(start),
                   data.begin() + static_cast<std::ptrdiff_t>(end));
        const bool full = end - start == longest_run;
        if (end == data.size()) return out;
        start = full ? end : end + 1;
    }
}

std::optional<Octets> unstuffed(std::span<const std::uint8_t> data) {
    Octets out;
    for (std::size_t at = 0; at < data.size();) {
        const std::size_t run = data[at];
        if (run == 0 || at + run > data.size()) return std::nullopt;
        for (std::size_t i = 1; i < run; ++i) {
            if (data[at + i] == 0) return std::nullopt;
            out.push_back(data[at + i]);
        }
        at += run;
        if (run <= longest_run && at < data.size()) out.push_back(0);
    }
    if (data.empty()) return std::nullopt;
    return out;
}

Octets line_bytes_of(std::span<const std::uint8_t> payload) {
    Writer body;
    body.append(payload);
    body.four(checksum(payload));
    Octets line = stuffed(body.take());
    line.push_back(0);
    return line;
}

std::optional<Octets> payload_of(std::span<const std::uint8_t> line_bytes) {
    auto body = unstuffed(line_bytes);
    if (!body || body->size() <= checksum_size) return std::nullopt;
    const std::size_t size = body->size() - checksum_size;
    const auto sent = Reader(std::span(*body).subspan(size)).four();
    body->resize(size);
    if (sent != checksum(*body)) return std::nullopt;
    return body;
}

FrameSplitter::FrameSplitter(std::size_t largest_payload)
    : most_(largest_payload + checksum_size + 1 + (largest_payload + checksum_size) / longest_run) {
}

std::vector<Octets> FrameSplitter::take(std::span<const std::uint8_t> received) {
    std::vector<Octets> frames;
    for (const std::uint8_t byte : received) {
        if (byte != 0) {
            if (frame_.size() == most_) dropping_ = true;
            if (!dropping_) frame_.push_back(byte);
            continue;
        }
        if (dropping_) ++too_long_;
        if (!dropping_ && !frame_.empty()) frames.push_back(std::move(frame_));
        frame_.clear();
        dropping_ = false;
    }
    return frames;
}

void Writer::two(std::uint16_t value) {
    octet(value & 0xFFu);
    octet(value >> 8);
}

void Writer::four(std::uint32_t value) {
    for (unsigned shift = 0; shift < 32; shift += 8) octet((value >> shift) & 0xFFu);
}

void Writer::varint(std::uint32_t value) {
    for (; value >= 0x80; value >>= 7) octet((value & 0x7Fu) | 0x80u);
    octet(value);
}

void Writer::append(std::span<const std::uint8_t> more) {
    bytes_.insert(bytes_.end(), more.begin(), more.end());
}

std::optional<std::uint8_t> Reader::octet() {
    if (rest_.empty()) return std::nullopt;
    const std::uint8_t value = rest_.front();
    rest_ = rest_.subspan(1);
    return value;
}

std::optional<std::uint16_t> Reader::two() {
    const auto low = octet();
    const auto high = octet();
    if (!low || !high) return std::nullopt;
    return static_cast<std::uint16_t>(*low | (*high << 8));
}

std::optional<std::uint32_t> Reader::four() {
    const auto low = two();
    const auto high = two();
    if (!low || !high) return std::nullopt;
    return *low | (std::uint32_t{*high} << 16);
}

std::optional<std::uint32_t> Reader::varint() {
    std::uint64_t value = 0;
    for (unsigned shift = 0; shift < 35; shift += 7) {
        const auto next = octet();
        if (!next) return std::nullopt;
        value |= std::uint64_t{*next & 0x7Fu} << shift;
        if ((*next & 0x80u) != 0) continue;
        if (value > 0xFFFFFFFFu) return std::nullopt;
        return static_cast<std::uint32_t>(value);
    }
    return std::nullopt;
}

}  // namespace lanewright::sim
