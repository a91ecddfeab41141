#include <catch2/catch.hpp>

#include "adapt/stats/random.hpp"
#include "daemon/engine/edge_statistics.hpp"

using namespace lanewright;

namespace {

Reading reading(double up, double down, double left, double right) {
    Reading out;
    out.status = Status::open;
    out.up_mv = Measured{up, 0.6, Bound::exact};
    out.down_mv = Measured{down, 0.6, Bound::exact};
    out.left_ui = Measured{left, 0.005, Bound::exact};
    out.right_ui = Measured{right, 0.005, Bound::exact};
    return out;
}

const MonitorNoise noise{2, 1.0 / 64, 1.0, 0.006};

// Readings of one eye through a latch of 2 mV steps, or through none.
std::vector<Reading> draws(std::size_t count, double sigma, double step, std::uint64_t seed) {
    Random random(RandomKey{seed, 0, 1, 0});
    std::vector<Reading> out;
    const auto edge = [&](double value) {
        const double drawn = value + sigma * random.normal();
        return step > 0 ? step * std::round(drawn / step) : drawn;
    };
    for (std::size_t i = 0; i < count; ++i) {
        out.push_back(reading(edge(40.3), edge(38.9), 0.3, 0.3));
    }
    return out;
}

}  // namespace

TEST_CASE("Mean and variance of an edge are those of its values") {
    const std::vector<Reading> readings{reading(1, 10, 0.1, 0.2), reading(2, 10, 0.1, 0.2),
                                        reading(4, 10, 0.1, 0.2), reading(5, 10, 0.1, 0.2)};
    const auto edges = edge_statistics(readings);
    REQUIRE(edges.size() == 4);
    CHECK(edges[0].name == "up_mv");
    CHECK(edges[0].mean == Approx(3));
    CHECK(edges[0].variance() == Approx(10.0 / 3));  // (4 + 1 + 1 + 4) / 3
    CHECK(edges[1].variance() == 0);
    const auto back = edges_from(values_of(edges));
    REQUIRE(back.size() == 4);
    CHECK(back[0].mean == Approx(3));
    CHECK(back[0].variance() == Approx(10.0 / 3));
    CHECK(back[0].vertical);
    CHECK_FALSE(back[2].vertical);
}

TEST_CASE("An edge that one reading does not have as a plain value has no statistics") {
    std::vector<Reading> readings{reading(1, 2, 0.1, 0.2), reading(1, 2, 0.1, 0.2)};
    readings[1].up_mv->bound = Bound::at_least;
    CHECK(edge_statistics(readings).size() == 3);
    readings[1].status = Status::closed;
    CHECK(edge_statistics(readings).empty());
}

// Chi-square, upper 5 % points: 18.307 at 10 and 31.410 at 20 degrees of freedom (NIST/SEMATECH
// e-Handbook of Statistical Methods, table 1.3.6.7.4; values from memory).
TEST_CASE("The chance of a larger spread is that of the chi-square table") {
    CHECK(larger_spread_chance(18.307, 10, 1) == Approx(0.05).margin(1e-5));
    CHECK(larger_spread_chance(4 * 31.410, 20, 2) == Approx(0.05).margin(1e-5));
    CHECK(larger_spread_chance(0, 20, 1) == 1);
    CHECK(larger_spread_chance(1, 20, 0) == 0);
}

TEST_CASE("The sigma of a latching monitor comes back with the spread of its step taken off") {
    for (const double step : {0.0, 2.0}) {
        double sum = 0;
        constexpr int runs = 200;
        for (int run = 0; run < runs; ++run) {
            const auto edges = edge_statistics(draws(20, 1.2, step, 100 + run));
            const Sigma sigma = pooled_sigma(edges, true, step);
            CHECK(sigma.degrees == 38);
            sum += sigma.value * sigma.value;
        }
        // The variance's own standard error is sqrt(2 / 38 / 200) = 1.6 %, more with a step.
        CHECK(sum / runs == Approx(1.44).epsilon(0.1));
    }
}

TEST_CASE("Readings that stand far apart are left out, but no more than one in ten") {
    std::vector<Reading> readings = draws(20, 1, 2, 7);
    CHECK(without_strays(readings, noise).left_out == 0);
    readings[4].up_mv->value = 3;
    const Kept kept = without_strays(readings, noise);
    CHECK(kept.left_out == 1);
    CHECK(kept.readings.size() == 19);
    readings[9].status = Status::closed;
    readings[9].up_mv.reset();
    CHECK(without_strays(readings, noise).left_out == 2);
    readings[12].down_mv->value = 90;
    CHECK(without_strays(readings, noise).left_out == 2);
}

TEST_CASE("A shift is significant where it is, and seldom where there is none") {
    const Reading before = reading(40, 40, 0.3, 0.3);
    CHECK_FALSE(significant_shift(before, reading(42, 38, 0.3, 0.3), noise, true));
    const auto shift = significant_shift(before, reading(40, 32, 0.3, 0.3), noise, true);
    REQUIRE(shift);
    CHECK(shift->edge == "down_mv");
    // 8 mV over the root of twice (1^2 + 2^2 / 12).
    CHECK(shift->standard_errors == Approx(8 / std::sqrt(2 * (1 + 4.0 / 12))));
    CHECK(text_of(*shift).find("down edge from 40.0 to 32.0 mV") != std::string::npos);
    Reading closed = before;
    closed.status = Status::closed;
    CHECK(significant_shift(before, closed, noise, true)->gone);
    int false_alarms = 0;
    constexpr int pairs = 2000;
    Random random(RandomKey{5, 0, 2, 0});
    const auto drawn = [&] {
        return reading(40 + random.normal(), 40 + random.normal(), 0.3 + 0.006 * random.normal(),
                       0.3 + 0.006 * random.normal());
    };
    for (int i = 0; i < pairs; ++i) {
        Reading one = drawn(), other = drawn();
        for (Reading* each : {&one, &other}) {
            for (auto edge : {&Reading::up_mv, &Reading::down_mv}) (each->*edge)->std_error = 1;
            for (auto edge : {&Reading::left_ui, &Reading::right_ui}) {
                (each->*edge)->std_error = 0.006;
            }
        }
        false_alarms += significant_shift(one, other, noise, false).has_value();
    }
    // 5 % of 2,000 are 100 with a standard deviation of 10.
    CHECK(false_alarms < 150);
    CHECK(false_alarms > 50);
}

TEST_CASE("A counted eye that noise alone closes has not shifted, one that really closes has") {
    const Reading before = reading(2, 2, 0.05, 0.05);
    Reading now = reading(-0.5, 1.2, -0.01, -0.01);
    now.status = Status::closed;
    CHECK_FALSE(significant_shift(before, now, noise, false));
    now.up_mv->value = -6;
    const auto shift = significant_shift(before, now, noise, false);
    REQUIRE(shift);
    CHECK_FALSE(shift->gone);
    // 8 mV over the root of twice 1 mV squared.
    CHECK(shift->standard_errors == Approx(8 / std::sqrt(2.0)));
    CHECK(text_of(*shift) == "the up edge from 2.0 to -6.0 mV, 5.7 standard errors");
    // A receiver without lock has no edges to compare.
    now.status = Status::no_lock;
    CHECK(significant_shift(before, now, noise, false)->gone);
}
