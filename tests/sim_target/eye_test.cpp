#include "sim_target/physics/eye.hpp"

#include <catch2/catch.hpp>
#include <cmath>
#include <numbers>
#include <vector>

#include "sim_target/physics/fourier.hpp"
#include "sim_target/physics/gaussian.hpp"

using namespace lanewright::sim;

namespace {

Grid small_grid() {
    Grid grid;
    grid.window_ui = 32;
    return grid;
}

// A pulse of a Gaussian shape, and an echo after `echo_ui`.
std::vector<double> bell(const Grid& grid, double height_mv, double width_ui, double echo,
                         double echo_ui = 1.0) {
    std::vector<double> pulse(grid.samples());
    for (std::size_t n = 0; n < pulse.size(); ++n) {
        const double t = static_cast<double>(n) / static_cast<double>(grid.samples_per_ui) - 10.0;
        const auto shape = [&](double at) { return std::exp(-at * at / (width_ui * width_ui)); };
        pulse[n] = height_mv * (shape(t) + echo * shape(t - echo_ui));
    }
    return pulse;
}

// Every sum of ±taps: exact, and as slow as it sounds.
double enumerated_ratio(const std::vector<double>& taps, double cursor, double threshold,
                        double sigma) {
    double sum = 0;
    const std::size_t count = std::size_t{1} << taps.size();
    for (std::size_t pattern = 0; pattern < count; ++pattern) {
        double value = cursor;
        for (std::size_t k = 0; k < taps.size(); ++k)
            value += ((pattern >> k) & 1U) != 0 ? taps[k] : -taps[k];
        sum += gaussian_tail((value - threshold) / sigma);
    }
    return sum / static_cast<double>(count);
}

}  // namespace

TEST_CASE("the inverse transform agrees with the sum that defines it") {
    const std::size_t length = 64;
    std::vector<Cx> spectrum;
    for (std::size_t k = 0; k < 29; ++k)
        spectrum.push_back({std::cos(0.7 * static_cast<double>(k * k)),
                            k == 0 ? 0.0 : std::sin(1.3 * static_cast<double>(k))});
    std::vector<double> wave(length);
    std::vector<Cx> work;
    RealInverseFourier(length).run(spectrum, work, wave);
    for (std::size_t n = 0; n < length; ++n) {
        double sum = spectrum[0].re;
        for (std::size_t k = 1; k < spectrum.size(); ++k) {
            const double angle =
                2 * std::numbers::pi * static_cast<double>(k * n) / static_cast<double>(length);
            sum += 2 * (spectrum[k].re * std::cos(angle) - spectrum[k].im * std::sin(angle));
        }
        CHECK(wave[n] == Approx(sum).margin(1e-12));
    }
}

TEST_CASE("a transform of a length that is no power of two is refused") {
    CHECK_THROWS_AS(RealInverseFourier(96), std::invalid_argument);
    CHECK_THROWS_AS(RealInverseFourier(4), std::invalid_argument);
}

TEST_CASE("the distribution on a grid agrees with full enumeration of 16 taps") {
    const std::vector<double> taps = {31,  -17, 12.3, 9.1,  -7.7, 6.2, 5.1,  -4.3,
                                      3.7, 3.1, 2.6,  -2.2, 1.9,  1.4, -1.1, 0.6};
    const double sigma = 2.3;
    NoisyIsi isi;
    isi.fill(taps, sigma);
    REQUIRE(isi.support_size() > 300);
    for (const double probability : {1e-2, 1e-4, 1e-6, 1e-9, 1e-12}) {
        const double level = isi.level_at(probability);
        CHECK(isi.below(level) == Approx(probability).epsilon(1e-5));
        const double exact = enumerated_ratio(taps, 0.0, level, sigma);
        // A level wrong by 0.03 sigma changes the ratio by some 0.03 times the normal deviate.
        const double allowed = 0.03 * gaussian_tail_inverse(probability) + 0.01;
        CHECK(std::abs(std::log(exact / probability)) < allowed);
    }
}

TEST_CASE("many small taps count as noise of their variance") {
    const std::vector<double> taps(25, 0.09);
    NoisyIsi isi;
    isi.fill(taps, 1.0);
    CHECK(isi.support_size() == 1);
    CHECK(isi.sigma() == Approx(std::sqrt(1.0 + 25 * 0.09 * 0.09)));
}

TEST_CASE("a symmetric pulse is sampled at its middle") {
    const Grid grid = small_grid();
    Eye eye(grid);
    eye.fill(bell(grid, 100, 0.6, 0.0), {2.0, 0.0}, {});
    CHECK(eye.recovered_phase_ui() == Approx(10.0).margin(1e-5));
    const Margins margins = eye.margins(1e-6);
    CHECK(margins.locked);
    CHECK_FALSE(margins.closed);
    CHECK(margins.up_mv == Approx(margins.down_mv).margin(1e-4));
    CHECK(margins.left_ui == Approx(margins.right_ui).margin(1e-4));
}

TEST_CASE("an echo moves the recovered phase to the later crossing") {
    const Grid grid = small_grid();
    Eye eye(grid);
    eye.fill(bell(grid, 100, 0.6, 0.3), {2.0, 0.0}, {});
    CHECK(eye.recovered_phase_ui() > 10.01);
    CHECK(eye.recovered_phase_ui() < 10.4);
    CHECK(eye.cursor_mv(eye.recovered_phase_ui() + 0.5) ==
          Approx(eye.cursor_mv(eye.recovered_phase_ui() - 0.5)).margin(1e-5));
}

TEST_CASE("edges lie where the error ratio is the one asked for") {
    const Grid grid = small_grid();
    Eye eye(grid);
    for (const double ratio : {1e-3, 1e-6, 1e-12}) {
        eye.fill(bell(grid, 100, 0.7, 0.2), {4.0, 0.01}, {1.5, 0.02});
        const Margins margins = eye.margins(ratio);
        REQUIRE_FALSE(margins.closed);
        CHECK(eye.error_ratio_at(0, margins.up_mv) == Approx(ratio).epsilon(1e-4));
        CHECK(eye.error_ratio_at(0, -margins.down_mv) == Approx(ratio).epsilon(1e-4));
        // 2e-5 UI at a slope of a few tens of normal deviates a unit interval
        CHECK(eye.error_ratio_at(-margins.left_ui, 0) == Approx(ratio).epsilon(2e-2));
        CHECK(eye.error_ratio_at(margins.right_ui, 0) == Approx(ratio).epsilon(2e-2));
        CHECK(eye.error_ratio_at(0, 0) == Approx(margins.centre_error_ratio).epsilon(1e-9));
    }
}

TEST_CASE("an offset of the decision takes from one side what it gives to the other") {
    const Grid grid = small_grid();
    Eye eye(grid);
    eye.fill(bell(grid, 100, 0.6, 0.1), {2.0, 0.0}, {});
    const Margins centred = eye.margins(1e-6);
    eye.fill(bell(grid, 100, 0.6, 0.1), {2.0, 0.0}, {5.0, 0.0});
    const Margins shifted = eye.margins(1e-6);
    CHECK(shifted.up_mv == Approx(centred.up_mv - 5).margin(1e-3));
    CHECK(shifted.down_mv == Approx(centred.down_mv + 5).margin(1e-3));
}

TEST_CASE("the score goes through zero without a jump as an eye closes") {
    const Grid grid = small_grid();
    Eye eye(grid);
    const Required required{20, 0.3, 1e-6};
    double before = 1e9;
    bool seen_open = false, seen_closed = false;
    // Noise grows in small steps; the eye closes on the way.
    for (double noise = 6.0; noise < 20.0; noise *= 1.01) {
        eye.fill(bell(grid, 100, 0.75, 0.25), {noise, 0.0}, {});
        const Margins margins = eye.margins(required.error_ratio);
        const double now = score(margins, required);
        CHECK((now > 0) == !margins.closed);
        if (before < 1e8) {
            CHECK(now < before);
            CHECK(before - now < 0.25);
        }
        before = now;
        (margins.closed ? seen_closed : seen_open) = true;
    }
    CHECK(seen_open);
    CHECK(seen_closed);
}

TEST_CASE("jitter narrows the eye more than it lowers it") {
    const Grid grid = small_grid();
    Eye eye(grid);
    eye.fill(bell(grid, 100, 0.6, 0.0), {1.0, 0.0}, {});
    const Margins still = eye.margins(1e-6);
    eye.fill(bell(grid, 100, 0.6, 0.0), {1.0, 0.02}, {});
    const Margins shaken = eye.margins(1e-6);
    CHECK(still.width_ui() - shaken.width_ui() > 2 * 3.0 * 0.02);
    CHECK(still.width_ui() - shaken.width_ui() < 2 * 6.0 * 0.02);
    CHECK(still.height_mv() - shaken.height_mv() < 0.3 * still.height_mv());
}

TEST_CASE("pulses that are no pulses do no harm") {
    const Grid grid = small_grid();
    Eye eye(grid);
    for (const double height : {0.0, -50.0, 1e-12}) {
        eye.fill(bell(grid, height, 0.6, 0.0), {1.0, 0.01}, {});
        const Margins margins = eye.margins(1e-6);
        CHECK(margins.closed);
        CHECK(std::isfinite(margins.up_mv));
        CHECK(score(margins, {10, 0.1, 1e-6}) < 0);
    }
}

TEST_CASE("the tabled tail agrees with the exact one from end to end") {
    double worst = 0;
    for (double x = -12; x < 37; x += 0.00317)
        worst = std::max(worst, std::abs(quick_gaussian_tail(x) / gaussian_tail(x) - 1.0));
    CHECK(worst < 1e-8);
    CHECK(quick_gaussian_tail(40.0) == gaussian_tail(40.0));
}
