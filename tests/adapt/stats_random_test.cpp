#include <algorithm>
#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <set>
#include <vector>

#include "adapt/stats/random.hpp"

using namespace lanewright;

// Known-answer vectors that come with the code published beside Salmon et al., SC 2011
// (values from memory).
TEST_CASE("philox gives the published known answers") {
    using Words = std::array<std::uint32_t, 4>;
    CHECK(philox4x32({0, 0, 0, 0}, {0, 0}) ==
          Words{0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8});
    CHECK(philox4x32({0xffffffff, 0xffffffff, 0xffffffff, 0xffffffff}, {0xffffffff, 0xffffffff}) ==
          Words{0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd});
    CHECK(philox4x32({0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344}, {0xa4093822, 0x299f31d0}) ==
          Words{0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1});
}

TEST_CASE("a key gives one sequence and every part of the key changes it") {
    const RandomKey key{7, 1, 2, 3};
    Random first(key), again(key);
    for (int i = 0; i < 100; ++i) CHECK(first.bits() == again.bits());

    std::set<std::uint64_t> starts;
    for (const RandomKey& each :
         {key, RandomKey{8, 1, 2, 3}, RandomKey{7 + (1ull << 32), 1, 2, 3}, RandomKey{7, 2, 2, 3},
          RandomKey{7, 1, 3, 3}, RandomKey{7, 1, 2, 4}}) {
        starts.insert(Random(each).bits());
    }
    CHECK(starts.size() == 6);
}

TEST_CASE("uniform draws stay inside the open interval and are evenly spread") {
    Random random({1, 0, 0, 0});
    constexpr int draws = 100'000;
    std::array<int, 10> cells{};
    for (int i = 0; i < draws; ++i) {
        const double value = random.uniform();
        REQUIRE(value > 0);
        REQUIRE(value < 1);
        cells[static_cast<std::size_t>(value * 10)] += 1;
    }
    // Five standard deviations of a binomial count (common practice).
    for (int count : cells) CHECK(std::abs(count - draws / 10) < 5 * std::sqrt(draws * 0.09));
}

TEST_CASE("normal draws have the moments of a standard normal value") {
    Random random({1, 0, 0, 1});
    constexpr int draws = 200'000;
    double sum = 0, squares = 0, fourths = 0;
    int beyond_two = 0;
    for (int i = 0; i < draws; ++i) {
        const double value = random.normal();
        sum += value;
        squares += value * value;
        fourths += value * value * value * value;
        beyond_two += value > 2 ? 1 : 0;
    }
    CHECK(std::abs(sum / draws) < 0.012);
    CHECK(squares / draws == Approx(1).margin(0.016));
    CHECK(fourths / draws == Approx(3).margin(0.12));
    CHECK(static_cast<double>(beyond_two) / draws == Approx(0.02275013195).margin(0.0017));
}

TEST_CASE("below is unbiased, covers its range and takes a limit of zero") {
    Random random({1, 0, 0, 2});
    CHECK(random.below(0) == 0);
    CHECK(random.below(1) == 0);
    std::array<int, 7> cells{};
    for (int i = 0; i < 70'000; ++i) cells.at(random.below(7)) += 1;
    for (int count : cells) CHECK(std::abs(count - 10'000) < 500);
    // Just over half of the range: a plain remainder would give low values twice as often.
    const std::uint64_t limit = (1ull << 63) + 1;
    int low = 0;
    for (int i = 0; i < 10'000; ++i) low += random.below(limit) < limit / 2 ? 1 : 0;
    CHECK(std::abs(low - 5'000) < 250);
}
