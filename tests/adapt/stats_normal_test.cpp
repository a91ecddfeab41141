#include <catch2/catch.hpp>
#include <cmath>
#include <limits>

#include "adapt/stats/normal.hpp"

using namespace lanewright;

// Gaussian tails to ten digits, computed with multi-precision arithmetic from erfc.
TEST_CASE("normal tails match multi-precision values") {
    const double expected[] = {0.1586552539,   0.02275013195,  1.349898032e-3,  3.167124183e-5,
                               2.866515719e-7, 9.86587645e-10, 1.279812544e-12, 6.220960574e-16};
    for (int x = 1; x <= 8; ++x) {
        CHECK(normal_tail(x) == Approx(expected[x - 1]).epsilon(1e-9));
        CHECK(log_normal_tail(x) == Approx(std::log(expected[x - 1])).epsilon(1e-9));
    }
    CHECK(normal_tail(0) == 0.5);
    CHECK(normal_tail(-2) == Approx(1 - 0.02275013195).epsilon(1e-10));
}

// The Q scale of BER = erfc(Q / sqrt 2) / 2, as used with the dual-Dirac model (INCITS TR-35-2004,
// value from memory); digits computed with multi-precision arithmetic.
TEST_CASE("the Q scale matches the table from 1e-3 to 1e-18") {
    struct Row {
        double ratio, q;
    };
    for (const auto& row :
         {Row{1e-3, 3.09023231}, Row{1e-4, 3.71901649}, Row{1e-5, 4.26489079},
          Row{1e-6, 4.75342431}, Row{1e-7, 5.19933758}, Row{1e-8, 5.61200124},
          Row{1e-9, 5.99780702}, Row{1e-10, 6.36134090}, Row{1e-11, 6.70602316},
          Row{1e-12, 7.03448383}, Row{1e-13, 7.34879610}, Row{1e-14, 7.65062809},
          Row{1e-15, 7.94134533}, Row{1e-16, 8.22208222}, Row{1e-18, 8.75729035}}) {
        CHECK(normal_q(row.ratio) == Approx(row.q).epsilon(2e-9));
        CHECK(normal_q_of_log(std::log(row.ratio)) == Approx(row.q).epsilon(2e-9));
    }
    // Only half and a quarter of the errors counted: the columns for other transition densities.
    CHECK(2 * normal_q(1e-12 / 0.5) == Approx(13.8743629).epsilon(1e-8));
    CHECK(2 * normal_q(1e-12 / 0.25) == Approx(13.6770955).epsilon(1e-8));
}

TEST_CASE("a dual-Dirac edge lands where the closed form says") {
    // DJ 0.2 UI, RJ 0.02 UI: TJ = DJ + 2 Q(BER) RJ.
    const auto total_jitter_ui = [](double ratio) { return 0.2 + 2 * normal_q(ratio) * 0.02; };
    CHECK(total_jitter_ui(1e-6) == Approx(0.39013697).epsilon(1e-8));
    CHECK(total_jitter_ui(1e-12) == Approx(0.48137935).epsilon(1e-8));
}

TEST_CASE("the inverse of the normal tail undoes it over the whole range") {
    for (double exponent = -300; exponent < -0.31; exponent += 0.37) {
        const double ratio = std::pow(10.0, exponent);
        CHECK(normal_tail(normal_q(ratio)) == Approx(ratio).epsilon(1e-11));
        if (exponent > -15) CHECK(normal_q(1 - ratio) == Approx(-normal_q(ratio)).epsilon(1e-2));
    }
    for (double x = -5; x <= 37; x += 0.25) {
        CHECK(normal_q(normal_tail(x)) == Approx(x).margin(1e-9));
    }
}

TEST_CASE("ratios too small for a double have a Q by their logarithm") {
    // ln Q(x) ~ -x^2/2 - ln(x sqrt(2 pi)) for large x (Abramowitz & Stegun 26.2.12).
    const double x = normal_q_of_log(-5000);
    CHECK(log_normal_tail(x) == Approx(-5000).epsilon(1e-12));
    CHECK(-x * x / 2 - std::log(x * std::sqrt(2 * M_PI)) == Approx(-5000).epsilon(1e-6));
}

TEST_CASE("the Q scale says infinity at the ends and keeps a NaN") {
    const double infinity = std::numeric_limits<double>::infinity();
    CHECK(normal_q(0) == infinity);
    CHECK(normal_q(-1) == infinity);
    CHECK(normal_q(1) == -infinity);
    CHECK(normal_q(0.5) == 0);
    CHECK(normal_q_of_log(-infinity) == infinity);
    CHECK(normal_q_of_log(0) == -infinity);
    CHECK(std::isnan(normal_q(std::nan(""))));
    CHECK(std::isnan(normal_q_of_log(std::nan(""))));
}
