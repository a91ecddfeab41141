#include "adapt/stats/random.hpp"

#include "adapt/stats/normal.hpp"

namespace lanewright {

std::array<std::uint32_t, 4> philox4x32(std::array<std::uint32_t, 4> counter,
                                        std::array<std::uint32_t, 2> key) {
    constexpr std::uint64_t multiplier_0 = 0xD2511F53u, multiplier_1 = 0xCD9E8D57u;
    constexpr std::uint32_t weyl_0 = 0x9E3779B9u, weyl_1 = 0xBB67AE85u;
    for (int round = 0; round < 10; ++round) {
        const std::uint64_t product_0 = multiplier_0 * counter[0];
        const std::uint64_t product_1 = multiplier_1 * counter[2];
        counter = {static_cast<std::uint32_t>(product_1 >> 32) ^ counter[1] ^ key[0],
                   static_cast<std::uint32_t>(product_1),
                   static_cast<std::uint32_t>(product_0 >> 32) ^ counter[3] ^ key[1],
                   static_cast<std::uint32_t>(product_0)};
        key[0] += weyl_0;
        key[1] += weyl_1;
    }
    return counter;
}

Random::Random(RandomKey key) : key_(key) {}

std::uint64_t Random::bits() {
    if (used_ + 2 > words_.size()) {
        words_ = philox4x32(
            {block_++, key_.lane, key_.purpose, key_.ordinal},
            {static_cast<std::uint32_t>(key_.seed), static_cast<std::uint32_t>(key_.seed >> 32)});
        used_ = 0;
    }
    const std::uint64_t low = words_[used_], high = words_[used_ + 1];
    used_ += 2;
    return high << 32 | low;
}

double Random::uniform() {
    // The middle of one of 2^52 equal cells: exact in a double at both ends.
    constexpr double cell = 1.0 / 4503599627370496.0;
    return (static_cast<double>(bits() >> 12) + 0.5) * cell;
}

double Random::normal() {
    return -normal_q(uniform());
}

std::uint64_t Random::below(std::uint64_t limit) {
    if (limit == 0) return 0;
    const std::uint64_t surplus = (0 - limit) % limit;  // 2^64 modulo limit
    std::uint64_t draw = bits();
    while (draw < surplus) draw = bits();
    return draw % limit;
}

}  // namespace lanewright
