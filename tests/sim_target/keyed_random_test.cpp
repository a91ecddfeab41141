#include "sim_target/physics/keyed_random.hpp"

#include <catch2/catch.hpp>
#include <cmath>
#include <set>
#include <vector>

using namespace lanewright::sim;

// Known answers of the generator's authors' distribution (Salmon et al., SC11); values from memory.
TEST_CASE("the generator gives the published known answers") {
    CHECK(philox({0, 0, 0, 0}, {0, 0}) ==
          PhiloxCounter{0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8});
    CHECK(philox({0xffffffff, 0xffffffff, 0xffffffff, 0xffffffff}, {0xffffffff, 0xffffffff}) ==
          PhiloxCounter{0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd});
    CHECK(philox({0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344}, {0xa4093822, 0x299f31d0}) ==
          PhiloxCounter{0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1});
}

TEST_CASE("a draw depends on every word of its key, on their order and on nothing else") {
    const auto first = [](std::uint64_t seed, Purpose purpose, std::vector<std::uint64_t> words) {
        return KeyedRandom(seed, purpose, words).uniform();
    };
    const double reference = first(7, Purpose::latched_edge, {1, 2, 3});
    CHECK(first(7, Purpose::latched_edge, {1, 2, 3}) == reference);
    const std::set<double> others = {reference,
                                     first(8, Purpose::latched_edge, {1, 2, 3}),
                                     first(7, Purpose::element_error, {1, 2, 3}),
                                     first(7, Purpose::latched_edge, {2, 1, 3}),
                                     first(7, Purpose::latched_edge, {1, 2, 4}),
                                     first(7, Purpose::latched_edge, {1, 2}),
                                     first(7, Purpose::latched_edge, {1, 2, 3, 0}),
                                     first(7, Purpose::latched_edge, {0x100000001, 2, 3})};
    CHECK(others.size() == 8);
}

// Bounds at five standard errors of the estimates: fixed keys, so the outcome is fixed too.
TEST_CASE("keyed normal draws have mean 0, variance 1 and the tail of a normal distribution") {
    const int count = 40000;
    double sum = 0, squares = 0;
    int beyond_two = 0;
    for (int i = 0; i < count; ++i) {
        const double x =
            KeyedRandom(99, Purpose::latched_edge, {static_cast<std::uint64_t>(i)}).normal();
        sum += x;
        squares += x * x;
        beyond_two += std::abs(x) > 2 ? 1 : 0;
    }
    CHECK(std::abs(sum / count) < 5.0 / std::sqrt(count));
    CHECK(std::abs(squares / count - 1.0) < 5.0 * std::sqrt(2.0 / count));
    const double share = 2 * 0.02275013195;  // Gaussian tail at 2, any table
    CHECK(std::abs(static_cast<double>(beyond_two) / count - share) <
          5.0 * std::sqrt(share * (1 - share) / count));
}

TEST_CASE("uniform draws stay inside 0 and 1 and fill it evenly") {
    KeyedRandom random(3, Purpose::board_fault, {11});
    std::vector<int> bins(10, 0);
    for (int i = 0; i < 20000; ++i) {
        const double u = random.uniform();
        REQUIRE(u > 0.0);
        REQUIRE(u < 1.0);
        ++bins[static_cast<std::size_t>(u * 10)];
    }
    double chi_square = 0;
    for (const int bin : bins) chi_square += (bin - 2000.0) * (bin - 2000.0) / 2000.0;
    CHECK(chi_square < 27.9);  // 99.9 % point with 9 degrees of freedom, common tables
    CHECK(chi_square > 1.15);  // 0.1 % point: too even would be wrong as well
}
