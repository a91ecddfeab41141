#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <limits>
#include <vector>

#include "adapt/search/score.hpp"
#include "adapt/stats/random.hpp"

using namespace lanewright;

namespace {

constexpr Required required{1e-6, 40, 0.3};
constexpr double infinity = std::numeric_limits<double>::infinity();

Reading four_edges(double up, double down, double left, double right, double height_error = 0,
                   double width_error = 0) {
    Reading reading;
    reading.status = Status::open;
    reading.error_ratio = 1e-6;
    reading.up_mv = Measured{up, height_error, Bound::exact};
    reading.down_mv = Measured{down, height_error, Bound::exact};
    reading.left_ui = Measured{left, width_error, Bound::exact};
    reading.right_ui = Measured{right, width_error, Bound::exact};
    return reading;
}

}  // namespace

TEST_CASE("the score is twice the nearest edge over what is required, the smaller direction") {
    CHECK(score_of(four_edges(30, 25, 0.2, 0.2), required).value == Approx(1.25));
    CHECK(score_of(four_edges(30, 25, 0.2, 0.12), required).value == Approx(0.8));
    CHECK(score_of(four_edges(-5, 25, 0.2, 0.2), required).value == Approx(-0.25));
}

TEST_CASE("a monitor of height and width alone is scored by the whole opening") {
    Reading reading;
    reading.status = Status::open;
    reading.centred_assumed = true;
    reading.height_mv = Measured{50, 1, Bound::exact};
    reading.width_ui = Measured{0.45, 0.001, Bound::exact};
    const auto score = score_of(reading, required);
    CHECK(score.value == Approx(1.25));
    CHECK(score.std_error == Approx(1.0 / 40));
}

TEST_CASE("a direction without requirement is left out") {
    const Required only_height{1e-6, 40, 0};
    CHECK(score_of(four_edges(30, 25, 0, 0), only_height).value == Approx(1.25));
}

TEST_CASE("the limits come from the weakest side") {
    // Up is the nearest edge, but down is far less certain. 1.959964 and 2.497705: two-sided 95 %,
    // and the same shared by four sides (normal distribution, common practice).
    auto reading = four_edges(22, 24, 0.3, 0.3, 0.5, 0.001);
    reading.down_mv->std_error = 3;
    const auto score = score_of(reading, required);
    CHECK(score.value == Approx(1.1));
    CHECK(score.std_error == Approx(0.025));
    CHECK(score.low == Approx(1.2 - 1.959964 * 0.15).epsilon(1e-6));
    CHECK(score.high == Approx(1.1 + 2.497705 * 0.025).epsilon(1e-6));
}

TEST_CASE("a closed latched edge scores nothing with an unknown lower limit") {
    auto reading = four_edges(10, 10, 0.2, 0.2, 0.5, 0.01);
    reading.status = Status::closed;
    reading.up_mv = Measured{1.0, 0.5, Bound::at_most};
    const auto score = score_of(reading, required);
    CHECK(score.value == 0);
    CHECK(score.low == -infinity);
    CHECK(score.high == Approx((1.0 + 2.497705 * 0.5) * 2 / 40).epsilon(1e-6));
    CHECK(score.bound == Bound::at_most);
}

TEST_CASE("a saturated edge has no upper limit of its own") {
    auto reading = four_edges(60, 60, 0.2, 0.2, 0.5, 0.01);
    reading.up_mv->bound = Bound::at_least;
    CHECK(score_of(reading, required).high == Approx((0.2 + 2.497705 * 0.01) * 2 / 0.3));
    for (auto* edge : {&reading.down_mv, &reading.left_ui, &reading.right_ui}) {
        (*edge)->bound = Bound::at_least;
    }
    const auto score = score_of(reading, required);
    CHECK(score.high == infinity);
    CHECK(score.bound == Bound::at_least);
    CHECK(std::isfinite(score.low));
}

TEST_CASE("no lock, void readings and missing edges claim nothing") {
    Reading reading;
    CHECK(score_of(reading, required).high == infinity);
    CHECK(score_of(reading, required).low == -infinity);
    reading.status = Status::no_lock;
    CHECK(score_of(reading, required).value == -infinity);
    CHECK(score_of(reading, required).high == 0);
    auto partial = four_edges(50, 50, 0.3, 0.3, 0.1, 0.001);
    partial.down_mv.reset();
    CHECK(score_of(partial, required).low == -infinity);
    CHECK(score_of(partial, required).value == -infinity);
    partial.down_mv = Measured{std::nan(""), 0.1, Bound::exact};
    CHECK(score_of(partial, required).low == -infinity);
    partial.down_mv = Measured{50, std::nan(""), Bound::exact};
    CHECK(score_of(partial, required).low == -infinity);
    // Nothing required: nothing can be said, least of all that it is met.
    CHECK(score_of(four_edges(50, 50, 0.3, 0.3), {1e-6, 0, 0}).low == -infinity);
}

TEST_CASE("the limits hold the true score as often as they say") {
    // The hardest case: four edges equally near, so that any of them may be the lowest reading.
    Random random({11, 0, 0, 0});
    constexpr int trials = 20'000;
    int above_low = 0, below_high = 0;
    for (int i = 0; i < trials; ++i) {
        const auto draw = [&](double value, double error) {
            return value + error * random.normal();
        };
        const auto reading =
            four_edges(draw(20, 1), draw(20, 1), draw(0.15, 0.01), draw(0.15, 0.01), 1, 0.01);
        const auto score = score_of(reading, required);
        above_low += score.low <= 1 ? 1 : 0;
        below_high += score.high >= 1 ? 1 : 0;
    }
    // 97.5 % each, less four standard deviations of the count.
    CHECK(above_low > trials * 0.975 - 4 * std::sqrt(trials * 0.025));
    CHECK(below_high > trials * 0.975 - 4 * std::sqrt(trials * 0.025));
    // And not by being useless: the upper limit is not far wider than it must be.
    CHECK(below_high < trials * 0.985);
}

// Widrow & Kollar, Quantization Noise, Cambridge 2008 (value from memory for the citation); the two
// ends follow from an even spread over a step.
TEST_CASE("a monitor's step does not average away without noise to move it") {
    CHECK(lasting_variance(2, 0) == Approx(4.0 / 12));
    CHECK(lasting_variance(2, 1e-6) == Approx(4.0 / 12).epsilon(1e-5));
    CHECK(lasting_variance(2, 1) < 0.005 * 4 / 12);
    CHECK(lasting_variance(0, 1) == 0);
    double last = lasting_variance(2, 0);
    for (double sigma = 0.05; sigma < 2; sigma += 0.05) {
        CHECK(lasting_variance(2, sigma) <= last);
        last = lasting_variance(2, sigma);
    }
}

TEST_CASE("what lasts of a step is what a long simulated mean shows") {
    Random random({12, 0, 0, 0});
    for (const double sigma : {0.3, 0.5, 0.8}) {
        constexpr double step = 2;
        double squares = 0;
        constexpr int positions = 400, draws = 2000;
        for (int i = 0; i < positions; ++i) {
            const double truth = 20 + step * random.uniform();
            double sum = 0;
            for (int j = 0; j < draws; ++j) {
                sum += step * std::round((truth + sigma * random.normal()) / step);
            }
            squares += (sum / draws - truth) * (sum / draws - truth);
        }
        const double passing = (step * step / 12 + sigma * sigma) / draws;
        CHECK(squares / positions ==
              Approx(lasting_variance(step, sigma) + passing).epsilon(0.2).margin(2e-4));
    }
}

TEST_CASE("the mean of equal latched readings keeps the doubt of the step") {
    const double single = std::sqrt(4.0 / 12);
    const std::vector<Reading> readings(9, four_edges(20, 20, 0.2, 0.2, single, 0.01));
    const auto mean = mean_of(readings, {2.0, 0, 0, 0});
    CHECK(mean.up_mv->value == 20);
    CHECK(mean.up_mv->std_error == Approx(single));
    // Declared noise that the readings do not show is not believed either.
    CHECK(mean_of(readings, {2.0, 0, 5.0, 0}).up_mv->std_error >= single * (1 - 1e-12));
    // Without a step the errors average as noise does.
    CHECK(mean.left_ui->std_error == Approx(0.01 / 3));
}

TEST_CASE("the mean of scattered readings is never surer than their scatter") {
    std::vector<Reading> readings;
    for (double up : {10.0, 30.0, 20.0, 20.0}) {
        readings.push_back(four_edges(up, 20, 0.2, 0.2, 0.1, 0.01));
    }
    const auto mean = mean_of(readings, {});
    CHECK(mean.up_mv->value == Approx(20));
    CHECK(mean.up_mv->std_error == Approx(std::sqrt(200.0 / 3) / 2));
}

TEST_CASE("means weigh by certainty and add up cost and bits") {
    auto sure = four_edges(20, 20, 0.2, 0.2, 1, 0.01);
    auto vague = four_edges(26, 20, 0.2, 0.2, 2, 0.01);
    sure.cost_s = 0.5;
    vague.cost_s = 0.25;
    sure.bit_count = 10;
    vague.bit_count = 20;
    vague.basis = Basis::extrapolated;
    const auto mean = mean_of(std::array{sure, vague}, {});
    CHECK(mean.up_mv->value == Approx((20 + 26 * 0.25) / 1.25));
    CHECK(mean.cost_s == 0.75);
    CHECK(mean.bit_count == 30);
    CHECK(mean.basis == Basis::extrapolated);
}

TEST_CASE("bounds stay bounds in a mean") {
    auto closed = four_edges(0, 20, 0.2, 0.2, 0.5, 0.01);
    closed.status = Status::closed;
    closed.up_mv = Measured{1, 0.5, Bound::at_most};
    auto open = four_edges(3, 20, 0.2, 0.2, 0.5, 0.01);
    auto full = four_edges(60, 20, 0.2, 0.2, 0.5, 0.01);
    full.up_mv->bound = Bound::at_least;

    CHECK(mean_of(std::array{closed, closed}, {}).up_mv == closed.up_mv);
    CHECK(mean_of(std::array{closed, closed}, {}).status == Status::closed);
    const auto mixed = mean_of(std::array{closed, open}, {});
    CHECK(mixed.up_mv->bound == Bound::at_most);
    CHECK(mixed.up_mv->value == 2);
    CHECK(score_of(mixed, required).low == -infinity);
    CHECK(mean_of(std::array{full, open}, {}).up_mv->bound == Bound::at_least);
    CHECK(mean_of(std::array{full, open}, {}).status == Status::saturated);
    // Both at once cannot be: nothing is then known of that edge.
    const auto absurd = mean_of(std::array{closed, full}, {});
    CHECK(absurd.up_mv->std_error == infinity);
    CHECK(score_of(absurd, required).low == -infinity);
}

TEST_CASE("one reading without lock spoils the mean, void ones do not enter") {
    Reading lost;
    lost.status = Status::no_lock;
    const auto good = four_edges(30, 30, 0.2, 0.2, 0.5, 0.01);
    const auto mean = mean_of(std::array{good, lost}, {});
    CHECK(mean.status == Status::no_lock);
    CHECK(score_of(mean, required).low == -infinity);
    CHECK(score_of(mean, required).high > 1);
    CHECK(mean_of(std::array{Reading{}, good}, {}).status == Status::open);
    CHECK(mean_of(std::array{Reading{}}, {}).status == Status::void_reading);
    CHECK(mean_of({}, {}).status == Status::void_reading);
}
