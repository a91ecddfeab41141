#include <catch2/catch.hpp>
#include <cmath>
#include <limits>

#include "adapt/stats/limits.hpp"
#include "adapt/stats/tails.hpp"

using namespace lanewright;

namespace {

constexpr double digits = 2e-6;  // the tables below are given to six digits or more

}  // namespace

// One-sided Poisson limits, N BER = chi-square quantile / 2 (Garwood, Biometrika 28, 437-442, 1936,
// and Gehrels, ApJ 303, 336-346, 1986); computed with multi-precision arithmetic. A printed table
// gives 0.8117 for the lower 95 % limit of 3 events: a misprint of 0.8177.
TEST_CASE("one-sided Poisson limits match the exact table") {
    struct Row {
        std::uint64_t events;
        double up90, up95, up99, low90, low95, low99;
    };
    const Row rows[] = {
        {0, 2.302585, 2.995732, 4.605170, 0, 0, 0},
        {1, 3.889720, 4.743865, 6.638352, 0.105361, 0.0512933, 0.0100503},
        {2, 5.322320, 6.295794, 8.405947, 0.531812, 0.355362, 0.148555},
        {3, 6.680783, 7.753657, 10.04512, 1.10207, 0.817691, 0.436045},
        {4, 7.993590, 9.153519, 11.60463, 1.74477, 1.36632, 0.823249},
        {5, 9.274674, 10.51303, 13.10848, 2.43259, 1.97015, 1.27911},
        {6, 10.53207, 11.84240, 14.57062, 3.15190, 2.61301, 1.78528},
        {7, 11.77091, 13.14811, 15.99996, 3.89477, 3.28532, 2.33021},
        {8, 12.99471, 14.43465, 17.40265, 4.65612, 3.98082, 2.90611},
        {9, 14.20599, 15.70522, 18.78312, 5.43247, 4.69523, 3.50746},
        {10, 15.40664, 16.96222, 20.14468, 6.22130, 5.42541, 4.13020},
    };
    for (const auto& row : rows) {
        const auto at = [&](double confidence) {
            return poisson_limits(row.events, confidence, Sides::one);
        };
        CHECK(at(0.90).high == Approx(row.up90).epsilon(digits));
        CHECK(at(0.95).high == Approx(row.up95).epsilon(digits));
        CHECK(at(0.99).high == Approx(row.up99).epsilon(digits));
        CHECK(at(0.90).low == Approx(row.low90).epsilon(5e-6));
        CHECK(at(0.95).low == Approx(row.low95).epsilon(5e-6));
        CHECK(at(0.99).low == Approx(row.low99).epsilon(5e-6));
    }
}

TEST_CASE("two-sided Poisson limits match the exact table") {
    struct Row {
        std::uint64_t events;
        double low, high;
    };
    // Garwood 1936, 95 %.
    for (const auto& row :
         {Row{0, 0, 3.68888}, Row{1, 0.0253178, 5.57164}, Row{2, 0.242209, 7.22469},
          Row{3, 0.618672, 8.76727}, Row{5, 1.62349, 11.6683}, Row{10, 4.79539, 18.3904}}) {
        const auto limits = poisson_limits(row.events, 0.95, Sides::two);
        CHECK(limits.low == Approx(row.low).epsilon(5e-6));
        CHECK(limits.high == Approx(row.high).epsilon(5e-6));
    }
    const auto wide = poisson_limits(5, 0.99, Sides::two);
    CHECK(wide.low == Approx(1.07793).epsilon(5e-6));
    CHECK(wide.high == Approx(14.1498).epsilon(5e-6));
}

TEST_CASE("the confidence reached at a given length is the Poisson tail") {
    // The implicit formula N BER = -ln(1 - CL) + ln sum (N BER)^k / k! of BER-tester guides.
    CHECK(1 - gamma_q(1, 3) == Approx(0.950213).epsilon(1e-6));
    CHECK(1 - gamma_q(2, 3) == Approx(0.800852).epsilon(1e-6));
    CHECK(1 - gamma_q(4, 4.6) == Approx(0.674294).epsilon(1e-6));
    CHECK(gamma_p(3, 5) == Approx(0.875348).epsilon(1e-6));
}

TEST_CASE("zero errors at 95 percent need the well-known dwell times") {
    const double bits = poisson_limits(0, 0.95, Sides::one).high / 1e-12;
    CHECK(bits / 8e9 == Approx(374.467).epsilon(2e-6));
    CHECK(bits / 10.3125e9 == Approx(290.495).epsilon(2e-6));
    CHECK(bits / 25.78125e9 == Approx(116.198).epsilon(3e-6));
}

// Clopper & Pearson, Biometrika 26, 404-413, 1934 (value from memory for the citation); digits
// computed with multi-precision arithmetic.
TEST_CASE("Clopper-Pearson limits match the exact table") {
    struct Row {
        std::uint64_t events, trials;
        double up90, up95, up99;
    };
    for (const auto& row :
         {Row{0, 20, 0.108749, 0.139108, 0.205672}, Row{1, 20, 0.180961, 0.216106, 0.288790},
          Row{5, 20, 0.414890, 0.455582, 0.532106}, Row{10, 20, 0.661829, 0.698046, 0.761040},
          Row{0, 100, 0.0227628, 0.0295130, 0.0450074},
          Row{3, 100, 0.0655858, 0.0757108, 0.0969710}, Row{10, 100, 0.149883, 0.163718, 0.191330},
          Row{0, 1000, 0.00229994, 0.00299125, 0.00459458},
          Row{7, 1000, 0.0117428, 0.0131077, 0.0159281},
          Row{10, 1000, 0.0153650, 0.0169032, 0.0200426}}) {
        const auto at = [&](double confidence) {
            return binomial_limits(row.events, row.trials, confidence, Sides::one).high;
        };
        CHECK(at(0.90) == Approx(row.up90).epsilon(5e-6));
        CHECK(at(0.95) == Approx(row.up95).epsilon(5e-6));
        CHECK(at(0.99) == Approx(row.up99).epsilon(5e-6));
    }
    const auto two = binomial_limits(5, 100, 0.95, Sides::two);
    CHECK(two.low == Approx(0.0164319).epsilon(5e-6));
    CHECK(two.high == Approx(0.112835).epsilon(5e-6));
    CHECK(binomial_limits(1, 100, 0.95, Sides::two).low == Approx(0.000253146).epsilon(5e-6));
    CHECK(binomial_limits(0, 100, 0.95, Sides::two).high == Approx(0.0362167).epsilon(5e-6));
    // Closed form for no events: 1 - (1 - CL)^(1/n).
    CHECK(binomial_limits(0, 1'000'000'000, 0.95, Sides::one).high ==
          Approx(-std::expm1(std::log(0.05) / 1e9)).epsilon(1e-9));
}

TEST_CASE("binomial limits mirror between an outcome and its opposite") {
    for (std::uint64_t k : {0u, 1u, 7u, 10u, 13u, 20u}) {
        const auto limits = binomial_limits(k, 20, 0.95, Sides::two);
        const auto mirrored = binomial_limits(20 - k, 20, 0.95, Sides::two);
        CHECK(limits.low == Approx(1 - mirrored.high).margin(1e-12));
        CHECK(limits.high == Approx(1 - mirrored.low).margin(1e-12));
    }
}

TEST_CASE("binomial limits pass into Poisson limits for long runs") {
    for (std::uint64_t events : {0u, 1u, 10u, 100u, 10'000u}) {
        const double bits = 1e13;
        const auto binomial =
            binomial_limits(events, static_cast<std::uint64_t>(bits), 0.95, Sides::two);
        const auto poisson = poisson_limits(events, 0.95, Sides::two);
        CHECK(binomial.low * bits == Approx(poisson.low).epsilon(1e-7).margin(1e-12));
        CHECK(binomial.high * bits == Approx(poisson.high).epsilon(1e-7));
    }
}

TEST_CASE("limits of large counts approach the normal ones and stay quick") {
    const double k = 1e10;
    const auto limits = poisson_limits(static_cast<std::uint64_t>(k), 0.95, Sides::two);
    CHECK(limits.low == Approx(k - 1.959964 * std::sqrt(k)).epsilon(1e-9));
    CHECK(limits.high == Approx(k + 1.959964 * std::sqrt(k)).epsilon(1e-9));
}

// Haldane, Biometrika 33, 222-225, 1945 (value from memory); the time-terminated table shifted by
// one event.
TEST_CASE("a run stopped at the k-th error has the limits of one error fewer") {
    struct Row {
        std::uint64_t k;
        double up90, up95, up99;
    };
    for (const auto& row :
         {Row{1, 2.302585, 2.995732, 4.605170}, Row{2, 3.889720, 4.743865, 6.638352},
          Row{5, 7.993590, 9.153519, 11.60463}, Row{10, 14.20599, 15.70522, 18.78312},
          Row{100, 113.0105, 116.9971, 124.7226}}) {
        CHECK(stopped_run_limits(row.k, 0.90, Sides::one).high == Approx(row.up90).epsilon(digits));
        CHECK(stopped_run_limits(row.k, 0.95, Sides::one).high == Approx(row.up95).epsilon(digits));
        CHECK(stopped_run_limits(row.k, 0.99, Sides::one).high == Approx(row.up99).epsilon(digits));
    }
    CHECK(stopped_run_limits(100, 0.95, Sides::one).low == Approx(84.13928).epsilon(digits));
    CHECK(std::isinf(stopped_run_limits(0, 0.95, Sides::one).high));
}

// NIST e-Handbook 7.2.4 (value from memory for the citation).
TEST_CASE("Wilson limits match computed values") {
    CHECK(wilson_limits(0, 100, 0.95).low == Approx(0).margin(1e-15));
    CHECK(wilson_limits(0, 100, 0.95).high == Approx(0.0369935).epsilon(digits));
    CHECK(wilson_limits(1, 100, 0.95).low == Approx(0.001767432).epsilon(digits));
    CHECK(wilson_limits(10, 100, 0.95).high == Approx(0.1743657).epsilon(digits));
    CHECK(wilson_limits(4, 20, 0.95).low == Approx(0.08065766).epsilon(digits));
    CHECK(wilson_limits(4, 20, 0.95).high == Approx(0.4160174).epsilon(digits));
}

// Przyborowski & Wilenski, Biometrika 31, 313-323, 1940 (value from memory for the citation).
TEST_CASE("two error counts are compared by the conditional binomial test") {
    CHECK(fewer_errors_chance(2, 1e9, 10, 1e9) == Approx(79.0 / 4096).epsilon(1e-12));
    CHECK(fewer_errors_chance(2, 1e9, 0, 1e9) == 1);
    CHECK(fewer_errors_chance(0, 0, 5, 1e9) == 1);
    // Twice the bits in the first run: P(Bin(3, 2/3) = 0).
    CHECK(fewer_errors_chance(0, 2e9, 3, 1e9) == Approx(1.0 / 27).epsilon(1e-12));
}

TEST_CASE("limits without data or with a senseless confidence are harmless") {
    CHECK(std::isnan(poisson_limits(3, 0, Sides::one).high));
    CHECK(std::isnan(poisson_limits(3, 1, Sides::two).low));
    CHECK(std::isnan(binomial_limits(3, 10, std::nan(""), Sides::one).low));
    CHECK(binomial_limits(0, 0, 0.95, Sides::two).high == 1);
    CHECK(binomial_limits(11, 10, 0.95, Sides::two).low == 0);
    CHECK(binomial_limits(10, 10, 0.95, Sides::two).high == 1);
    CHECK(std::isnan(gamma_p(-1, 2)));
    CHECK(std::isnan(binomial_at_most(3, 2, 0.5)));
}

TEST_CASE("the logarithm of the gamma function matches factorials") {
    CHECK(log_gamma(1) == Approx(0).margin(1e-13));
    CHECK(log_gamma(6) == Approx(std::log(120)).epsilon(1e-14));
    CHECK(log_gamma(0.5) == Approx(0.5 * std::log(M_PI)).epsilon(1e-13));
    CHECK(log_gamma(171) == Approx(706.5730622457874).epsilon(1e-14));  // ln 170!
}
