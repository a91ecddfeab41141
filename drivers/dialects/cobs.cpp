#include "drivers/dialects/cobs.hpp"

#include <algorithm>

namespace lanewright {

namespace {
constexpr std::size_t longest_block = 254;  // non-zero bytes behind one length byte
}

std::vector<std::byte> cobs_encode(std::span<const std::byte> data) {
    std::vector<std::byte> out;
    out.reserve(data.size() + data.size() / longest_block + 2);
    std::size_t from = 0;
    bool open = true;  // a block is still to be written, be it an empty one
    while (open) {
        const auto rest = data.subspan(from);
        const auto zero = std::find(rest.begin(), rest.end(), std::byte{0});
        const auto run = static_cast<std::size_t>(zero - rest.begin());
        const std::size_t length = std::min(run, longest_block);
        out.push_back(static_cast<std::byte>(length + 1));
        out.insert(out.end(), rest.begin(), rest.begin() + static_cast<std::ptrdiff_t>(length));
        from += length;
        if (length == longest_block) {
            open = from < data.size();  // a full block stands for no zero
        } else {
            open = zero != rest.end();
            from += open ? 1 : 0;
        }
    }
    return out;
}

std::optional<std::vector<std::byte>> cobs_decode(std::span<const std::byte> encoded) {
    std::vector<std::byte> out;
    out.reserve(encoded.size());
    std::size_t at = 0;
    while (at < encoded.size()) {
        const auto code = static_cast<std::size_t>(encoded[at]);
        if (code == 0 || encoded.size() - at < code) return std::nullopt;
        const auto block = encoded.subspan(at + 1, code - 1);
        if (std::find(block.begin(), block.end(), std::byte{0}) != block.end()) return std::nullopt;
        out.insert(out.end(), block.begin(), block.end());
        at += code;
        if (code <= longest_block && at < encoded.size()) out.push_back(std::byte{0});
    }
    if (encoded.empty()) return std::nullopt;
    return out;
}

}  // namespace lanewright
