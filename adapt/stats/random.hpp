#pragma once
// Purpose:   random numbers from a key, so that a draw depends on what it is for and on nothing
//            that happened before: Philox 4x32-10 (Salmon, Moraes, Dror, Shaw, "Parallel random
//            numbers: as easy as 1, 2, 3", SC 2011).
// Ownership: values only.
// Threads:   no shared state; one Random belongs to one caller.

#include <array>
#include <cstddef>
#include <cstdint>

namespace lanewright {

// Two draws with different keys are independent. `purpose` tells apart the uses within one lane,
// `ordinal` the readings or steps within one use.
struct RandomKey {
    std::uint64_t seed = 0;
    std::uint32_t lane = 0, purpose = 0, ordinal = 0;
    bool operator==(const RandomKey&) const = default;
};

// The block function itself: ten rounds over a 128-bit counter under a 64-bit key.
std::array<std::uint32_t, 4> philox4x32(std::array<std::uint32_t, 4> counter,
                                        std::array<std::uint32_t, 2> key);

// The sequence that belongs to one key. It repeats after 2^32 blocks of four words.
class Random {
  public:
    explicit Random(RandomKey key);

    // 64 random bits.
    std::uint64_t bits();

    // Inside (0, 1): never either end; 52 random bits.
    double uniform();

    // Mean 0, standard deviation 1; by the inverse of the normal distribution, one draw each.
    double normal();

    // 0 .. limit-1, each equally likely (values that would favour some are drawn anew).
    // A limit of 0 gives 0.
    std::uint64_t below(std::uint64_t limit);

  private:
    RandomKey key_;
    std::uint32_t block_ = 0;
    std::array<std::uint32_t, 4> words_{};
    std::size_t used_ = 4;  // words of the present block already given out
};

}  // namespace lanewright
