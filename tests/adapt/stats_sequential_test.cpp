#include <catch2/catch.hpp>
#include <cmath>
#include <map>
#include <vector>

#include "adapt/stats/random.hpp"
#include "adapt/stats/sequential.hpp"

using namespace lanewright;

namespace {

struct Published {
    double low, high, alpha, beta;
    double slope, low_start, high_start, mean_at_low, mean_at_high, bits_without_error;
};

// Wald 1945 gives the formulas; the second row is the sequential sampling example of the NIST
// e-Handbook of Statistical Methods, 6.2.6 (-0.939 + 0.0397 n and 1.205 + 0.0397 n, first accepted
// at n = 24; attribution from memory).
const std::vector<Published> table{
    {0.1, 0.3, 0.02, 0.03, 0.18616894, -2.5826255, 2.8753885, 28.704835, 23.821689, 14},
    {0.01, 0.10, 0.05, 0.10, 0.039747432, -0.9388616, 1.2053786, 27.957021, 16.446679, 24},
    {0.1, 0.2, 0.05, 0.05, 0.14524435, -3.6309400, 3.6309400, 72.226603, 59.680531, 25},
    {1e-6, 1e-5, 0.05, 0.05, 3.9086566e-6, -1.2787486, 1.2787486, 395671.93, 188935.95, 327159}};

struct Exact {
    double takes_low = 0, takes_high = 0, mean_bits = 0;
};

// The chances of every count of errors while the test has not decided, bit by bit.
Exact followed(const RatioTest& test, double chance) {
    Exact exact;
    std::map<std::uint64_t, double> undecided{{0, 1.0}};
    for (double bits = 1; bits < 5000 && !undecided.empty(); ++bits) {
        std::map<std::uint64_t, double> after;
        for (const auto& [errors, share] : undecided) {
            exact.mean_bits += share;
            after[errors] += share * (1 - chance);
            after[errors + 1] += share * chance;
        }
        undecided.clear();
        for (const auto& [errors, share] : after) {
            const Leaning leaning = test.judge(errors, bits);
            if (leaning == Leaning::low) exact.takes_low += share;
            if (leaning == Leaning::high) exact.takes_high += share;
            if (leaning == Leaning::undecided && share > 1e-14) undecided[errors] = share;
        }
    }
    return exact;
}

}  // namespace

TEST_CASE("the sequential test has the lines and mean lengths that Wald's formulas give") {
    for (const Published& row : table) {
        const RatioTest test(row.low, row.high, row.alpha, row.beta);
        CHECK(test.slope() == Approx(row.slope).epsilon(1e-7));
        CHECK(test.low_start() == Approx(row.low_start).epsilon(1e-7));
        CHECK(test.high_start() == Approx(row.high_start).epsilon(1e-7));
        CHECK(test.mean_bits_at_low() == Approx(row.mean_at_low).epsilon(1e-7));
        CHECK(test.mean_bits_at_high() == Approx(row.mean_at_high).epsilon(1e-7));
        CHECK(test.bits_without_error() == row.bits_without_error);
        CHECK(test.judge(0, row.bits_without_error) == Leaning::low);
        CHECK(test.judge(0, row.bits_without_error - 1) == Leaning::undecided);
    }
}

TEST_CASE("followed through all counts the sequential test errs as often as it is known to") {
    struct Row {
        std::size_t test;
        double chance, takes_low, takes_high, mean_bits;
    };
    // Exact values by dynamic programming over the counts, overshoot included (computed apart from
    // this program; the test is Wald's of 1945).
    const std::vector<Row> rows{
        {0, 0.1, 0.98630784, 0.01369216, 29.901808},  {0, 0.3, 0.02742360, 0.97257640, 26.602207},
        {1, 0.01, 0.97795289, 0.02204711, 30.212726}, {1, 0.10, 0.09957880, 0.90042120, 22.369155},
        {2, 0.1, 0.96083024, 0.03916976, 74.950866},  {2, 0.2, 0.04827143, 0.95172857, 65.466360}};
    for (const Row& row : rows) {
        const Published& p = table[row.test];
        const Exact exact = followed({p.low, p.high, p.alpha, p.beta}, row.chance);
        CHECK(exact.takes_low == Approx(row.takes_low).epsilon(1e-6));
        CHECK(exact.takes_high == Approx(row.takes_high).epsilon(1e-6));
        CHECK(exact.mean_bits == Approx(row.mean_bits).epsilon(1e-6));
    }
}

TEST_CASE("drawn bit by bit the sequential test keeps to its chances of error") {
    const RatioTest test(0.1, 0.2, 0.05, 0.05);
    constexpr int runs = 4000;
    int wrong_at_low = 0, wrong_at_high = 0;
    for (int run = 0; run < 2 * runs; ++run) {
        const bool at_high = run >= runs;
        Random random({77, 0, 0, static_cast<std::uint32_t>(run)});
        std::uint64_t errors = 0;
        double bits = 0;
        Leaning leaning = Leaning::undecided;
        while (leaning == Leaning::undecided) {
            errors += random.uniform() < (at_high ? 0.2 : 0.1) ? 1 : 0;
            leaning = test.judge(errors, ++bits);
        }
        if (!at_high && leaning == Leaning::high) ++wrong_at_low;
        if (at_high && leaning == Leaning::low) ++wrong_at_high;
    }
    // The exact shares above, within four standard deviations of the count.
    CHECK(std::abs(wrong_at_low - 0.03916976 * runs) < 4 * std::sqrt(0.0392 * runs));
    CHECK(std::abs(wrong_at_high - 0.04827143 * runs) < 4 * std::sqrt(0.0483 * runs));
}

TEST_CASE("looks may be cut as they like and impossible ratios never decide") {
    const RatioTest test(1e-6, 1e-5);
    CHECK(test.log_ratio(3, 3e5) ==
          Approx(test.log_ratio(1, 1e5) + test.log_ratio(2, 2e5)).epsilon(1e-12));
    for (const RatioTest& none : {RatioTest(1e-5, 1e-6), RatioTest(0, 1e-6), RatioTest(0.1, 1),
                                  RatioTest(1e-6, 1e-5, 0.6, 0.05)}) {
        CHECK(none.judge(0, 1e12) == Leaning::undecided);
        CHECK(none.judge(1'000'000, 1e6) == Leaning::undecided);
    }
}
