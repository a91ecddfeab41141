#include "sim_target/board/wire_faults.hpp"

#include <algorithm>

namespace lanewright::sim {

WireFaults::WireFaults(FaultOptions options)
    : options_(std::move(options)), random_(options_.seed, Purpose::board_fault, {0}) {}

bool WireFaults::strikes(const RandomFault& fault, Direction direction) {
    const bool here = fault.direction == Direction::both || fault.direction == direction;
    return here && fault.probability > 0 && random_.uniform() < fault.probability;
}

std::size_t WireFaults::below(std::size_t count) {
    const auto drawn = static_cast<std::size_t>(random_.uniform() * static_cast<double>(count));
    return std::min(drawn, count - 1);
}

std::vector<FramePiece> WireFaults::pass(Octets line_bytes, Direction direction) {
    FramePiece piece{std::move(line_bytes), {}};
    if (strikes(options_.flip, direction)) {
        piece.bytes[below(piece.bytes.size())] ^= static_cast<std::uint8_t>(1u << below(8));
    }
    if (strikes(options_.cut, direction)) {
        // Anything from its start or from its end, the 00 included.
        const auto where = static_cast<std::ptrdiff_t>(below(piece.bytes.size()));
        if (random_.uniform() < 0.5) {
            piece.bytes.erase(piece.bytes.begin(), piece.bytes.begin() + where + 1);
        } else {
            piece.bytes.erase(piece.bytes.begin() + where, piece.bytes.end());
        }
    }
    if (strikes(options_.late, direction)) {
        piece.delay = std::chrono::duration_cast<std::chrono::nanoseconds>(
            std::chrono::duration<double, std::milli>(options_.late_ms));
    }
    if (strikes(options_.twice, direction)) return {piece, piece};
    return {piece};
}

std::string WireFaults::console() {
    if (options_.console_probability <= 0 || random_.uniform() >= options_.console_probability) {
        return {};
    }
    return options_.console_text;
}

Octets WireFaults::garbage() {
    Octets bytes(1 + below(60));
    for (std::uint8_t& byte : bytes) byte = static_cast<std::uint8_t>(below(256));
    return bytes;
}

}  // namespace lanewright::sim
