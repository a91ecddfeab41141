#include <catch2/catch.hpp>
#include <cmath>
#include <limits>

#include "adapt/stats/normal.hpp"
#include "adapt/stats/q_scale.hpp"

using namespace lanewright;

namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();

}  // namespace

TEST_CASE("the pull of counts is what differences of their likelihood show") {
    struct Case {
        double errors, bits;
        bool at_least;
        double q;
    };
    for (const Case& c : {Case{0, 1e6, false, 4.5}, Case{17, 1e6, false, 4.0},
                          Case{250, 1e4, false, 1.9}, Case{255, 1e7, true, 4.1}}) {
        const double h = 1e-4;
        const auto at = [&](double q) {
            return log_likelihood_of(c.errors, c.bits, c.at_least, q);
        };
        const Pull pull = pull_of(c.errors, c.bits, c.at_least, c.q);
        const double slope = (at(c.q + h) - at(c.q - h)) / (2 * h);
        CHECK(pull.gradient == Approx(slope).epsilon(1e-4).margin(1e-6));
        if (!c.at_least) {
            const double bend = (at(c.q + h) - 2 * at(c.q) + at(c.q - h)) / (h * h);
            CHECK(pull.information == Approx(-bend).epsilon(1e-3));
        }
        CHECK(pull.information > 0);
    }
}

TEST_CASE("at the true ratio the observed information is on average the expected one") {
    // Errors as expected: the observed information at the maximum is the Fisher information.
    const double q = 4.2, bits = 1e7;
    const Pull pull = pull_of(bits * normal_tail(q), bits, false, q);
    CHECK(pull.gradient == Approx(0).margin(1e-6 * pull.information));
    CHECK(pull.information == Approx(expected_information(bits, q)).epsilon(1e-6));
    // Far out nothing overflows.
    CHECK(std::isfinite(pull_of(3, 1e9, false, 30).gradient));
    CHECK(expected_information(1e9, 40) == 0);
}

// Dual-Dirac: DJ 0.2 UI, RJ 0.02 UI; left edges 0.17438033 at 1e-4, 0.19506849 at 1e-6, 0.24068968
// at 1e-12 (Q-scale line; INCITS TR-35-2004, values from memory of the formula).
TEST_CASE("an edge is carried to another ratio as the dual-Dirac line says") {
    const double slope = (0.19506849 - 0.17438033) / (normal_q(1e-6) - normal_q(1e-4));
    CHECK(slope == Approx(0.02).epsilon(1e-6));
    // Distances from the middle of the eye shrink by what the edge moves in.
    const Measured edge{0.5 - 0.19506849, 0, Bound::exact};
    const Measured carried = carried_edge(edge, {slope, 0, Bound::exact}, 1e-6, 1e-12);
    CHECK(carried.value == Approx(0.5 - 0.24068968).epsilon(1e-7));
    CHECK(carried.std_error > 0);
}

TEST_CASE("carrying adds the doubt of edge and slope and an unknown slope leaves nothing known") {
    const double further = normal_q(1e-12) - normal_q(1e-6);
    const Measured carried =
        carried_edge({40, 0.3, Bound::exact}, {3, 0.2, Bound::exact}, 1e-6, 1e-12);
    const double together = 0.3 + 0.2 * further;
    const double bend = 0.5 * bend_per_q * further * further * 3;
    CHECK(carried.std_error == Approx(std::sqrt(together * together + bend * bend)));
    CHECK(carried_edge({40, 0.3, Bound::exact}, {3, 0.2, Bound::exact}, 1e-6, 1e-6).value == 40);
    const Measured unknown =
        carried_edge({40, 0.3, Bound::at_least}, {0, 0, Bound::at_least}, 1e-6, 1e-12);
    CHECK(unknown.std_error == infinity);
    CHECK(unknown.bound == Bound::at_least);
}

TEST_CASE("an interval weighs a guess by the chance to be seen there") {
    // Phi(1) - Phi(-1) = 0.6826894921 (normal distribution, common practice).
    CHECK(log_interval_likelihood(-1, 1, 0, 1) == Approx(std::log(0.6826894921)).epsilon(1e-9));
    CHECK(log_interval_likelihood(9, 11, 8, 1) == Approx(std::log(0.1573053559)).epsilon(1e-6));
    CHECK(log_interval_likelihood(7, infinity, 8, 1) ==
          Approx(std::log(0.8413447461)).epsilon(1e-9));
    CHECK(log_interval_likelihood(-infinity, 7, 8, 1) ==
          Approx(std::log(0.1586552539)).epsilon(1e-9));
    // Mirror images weigh the same, also where both tails are tiny.
    CHECK(log_interval_likelihood(9, 11, 40, 1) ==
          Approx(log_interval_likelihood(69, 71, 40, 1)).epsilon(1e-9));
    CHECK(log_interval_likelihood(9, 11, 10, 0) == 0);
    CHECK(log_interval_likelihood(9, 11, 12, 0) == -infinity);
    CHECK(log_interval_likelihood(11, 9, 10, 1) == -infinity);
}
