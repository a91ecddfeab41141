#include "sim_target/physics/keyed_random.hpp"

#include <cmath>
#include <numbers>

namespace lanewright::sim {

namespace {

std::uint32_t low(std::uint64_t value) {
    return static_cast<std::uint32_t>(value & 0xFFFFFFFFU);
}

std::uint32_t high(std::uint64_t value) {
    return static_cast<std::uint32_t>(value >> 32U);
}

}  // namespace

PhiloxCounter philox(PhiloxCounter counter, PhiloxKey key) {
    constexpr std::uint64_t multiplier_0 = 0xD2511F53;
    constexpr std::uint64_t multiplier_1 = 0xCD9E8D57;
    constexpr std::uint32_t weyl_0 = 0x9E3779B9;
    constexpr std::uint32_t weyl_1 = 0xBB67AE85;
    for (int round = 0; round < 10; ++round) {
        const std::uint64_t product_0 = multiplier_0 * counter[0];
        const std::uint64_t product_1 = multiplier_1 * counter[2];
        counter = {high(product_1) ^ counter[1] ^ key[0], low(product_1),
                   high(product_0) ^ counter[3] ^ key[1], low(product_0)};
        key[0] += weyl_0;
        key[1] += weyl_1;
    }
    return counter;
}

KeyedRandom::KeyedRandom(std::uint64_t seed, Purpose purpose, std::span<const std::uint64_t> words)
    : key_{low(seed), high(seed)} {
    // Each word, with its position and the purpose, gives the next key; the length closes the
    // chain, so that a shorter list of words is never the beginning of a longer one.
    std::uint32_t position = 0;
    const auto fold = [&](std::uint64_t word, std::uint32_t mark) {
        const PhiloxCounter out =
            philox({low(word), high(word), mark, static_cast<std::uint32_t>(purpose)}, key_);
        key_ = {out[0] ^ out[2], out[1] ^ out[3]};
    };
    for (const std::uint64_t word : words) fold(word, ++position);
    fold(words.size(), 0x80000000U);
}

std::uint32_t KeyedRandom::bits() {
    if (left_ == 0) {
        words_ = philox({low(block_), high(block_), 0, 0}, key_);
        ++block_;
        left_ = 4;
    }
    --left_;
    return words_[3 - left_];
}

double KeyedRandom::uniform() {
    const std::uint64_t upper = bits();
    const std::uint64_t lower = bits();
    const std::uint64_t wide = ((upper << 32U) | lower) >> 11U;  // 53 bits
    return (static_cast<double>(wide) + 0.5) * 0x1.0p-53;
}

double KeyedRandom::normal() {
    const double radius = std::sqrt(-2.0 * std::log(uniform()));
    return radius * std::cos(2.0 * std::numbers::pi * uniform());
}

}  // namespace lanewright::sim
