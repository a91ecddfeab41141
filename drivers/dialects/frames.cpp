#include "drivers/dialects/frames.hpp"

#include <algorithm>

#include "drivers/dialects/bytes.hpp"
#include "drivers/dialects/cobs.hpp"
#include "drivers/dialects/crc32c.hpp"

namespace lanewright {

namespace {
constexpr std::size_t crc_bytes = 4;
}

std::vector<std::byte> frame_of(std::span<const std::byte> payload) {
    std::vector<std::byte> body(payload.begin(), payload.end());
    put_u32(body, crc32c(payload));
    std::vector<std::byte> frame = cobs_encode(body);
    frame.push_back(std::byte{0});
    return frame;
}

void FrameReader::set_largest(std::size_t largest_payload) {
    const std::size_t body = largest_payload + crc_bytes;
    largest_encoded_ = body + 1 + body / 254;
}

void FrameReader::reset() {
    arriving_.clear();
    too_long_ = false;
}

std::vector<std::vector<std::byte>> FrameReader::feed(std::span<const std::byte> received) {
    std::vector<std::vector<std::byte>> payloads;
    auto from = received.begin();
    while (from != received.end()) {
        const auto zero = std::find(from, received.end(), std::byte{0});
        const auto length = static_cast<std::size_t>(zero - from);
        if (arriving_.size() + length > largest_encoded_) {
            too_long_ = true;
            arriving_.clear();  // a flood without zeros must not fill the memory
        }
        if (!too_long_) arriving_.insert(arriving_.end(), from, zero);
        if (zero == received.end()) break;
        end_of_frame(payloads);
        from = zero + 1;
    }
    return payloads;
}

void FrameReader::end_of_frame(std::vector<std::vector<std::byte>>& payloads) {
    const bool nothing = arriving_.empty() && !too_long_;
    if (!nothing) {
        auto body = too_long_ ? std::nullopt : cobs_decode(arriving_);
        const std::size_t length = body && body->size() > crc_bytes ? body->size() - crc_bytes : 0;
        const auto payload = length == 0 ? std::span<const std::byte>{}
                                         : std::span<const std::byte>(*body).first(length);
        if (length > 0 && ByteReader(std::span<const std::byte>(*body).subspan(length)).u32() ==
                              crc32c(payload)) {
            ++good_;
            payloads.emplace_back(payload.begin(), payload.end());
        } else {
            ++bad_;
        }
    }
    reset();
}

}  // namespace lanewright
