#include "sim_target/physics/slice.hpp"

#include <catch2/catch.hpp>
#include <cmath>
#include <vector>

#include "sim_target/physics/eye.hpp"
#include "sim_target/physics/gaussian.hpp"

using namespace lanewright::sim;

namespace {

Grid short_grid() {
    Grid grid;
    grid.window_ui = 16;
    return grid;
}

// Bells of the given heights, one unit interval apart, the first in the middle of the window.
std::vector<double> bells(const Grid& grid, const std::vector<double>& heights_mv) {
    std::vector<double> samples(grid.samples());
    for (std::size_t n = 0; n < samples.size(); ++n) {
        const double t = static_cast<double>(n) / static_cast<double>(grid.samples_per_ui) - 6.0;
        for (std::size_t k = 0; k < heights_mv.size(); ++k) {
            const double away = (t - static_cast<double>(k)) / 0.5;
            samples[n] += heights_mv[k] * std::exp(-away * away);
        }
    }
    return samples;
}

Pulse pulse_of(const std::vector<double>& heights_mv) {
    Pulse pulse(short_grid());
    pulse.assign(bells(short_grid(), heights_mv));
    return pulse;
}

std::vector<double> taps_at(const Pulse& pulse, double phase_ui) {
    std::vector<double> taps(pulse.grid().window_ui), slopes(taps.size());
    pulse.take(phase_ui, taps, slopes);
    return taps;
}

// Mean over every pattern of the symbols other than the cursor; `of` is told what a one is at.
template <class Function>
double over_patterns(const std::vector<double>& taps, const Function& of) {
    std::vector<double> others;
    for (std::size_t k = 1; k < taps.size(); ++k)
        if (std::abs(taps[k]) > 1e-9) others.push_back(taps[k]);
    REQUIRE(others.size() <= 16);
    double sum = 0;
    const std::size_t count = std::size_t{1} << others.size();
    for (std::size_t pattern = 0; pattern < count; ++pattern) {
        double value = taps[0];
        for (std::size_t k = 0; k < others.size(); ++k)
            value += ((pattern >> k) & 1U) != 0 ? others[k] : -others[k];
        sum += of(value);
    }
    return sum / static_cast<double>(count);
}

// Written out: the stage on the value, early noise through its slope, late noise after it.
double below_after(const Disturbance& noise, double value, double threshold_mv) {
    const double knee = noise.stage.knee_mv;
    const double sum = 1 + (value / knee) * (value / knee);
    const double slope = std::pow(sum, -1.5);
    const double sigma = std::hypot(slope * noise.noise_mv, noise.late_mv);
    return gaussian_tail((value / std::sqrt(sum) - threshold_mv) / sigma);
}

}  // namespace

TEST_CASE("the compressive stage is odd, passes small signals and stops at its knee") {
    const Compression stage{300};
    CHECK(stage.value(1) == Approx(1).epsilon(1e-4));
    CHECK(stage.value(-120) == -stage.value(120));
    CHECK(stage.value(1e6) < 300);
    CHECK(stage.value(1e6) > 299.9);
    for (const double mv : {-500.0, -80.0, 10.0, 250.0, 700.0}) {
        CHECK(stage.inverse(stage.value(mv)) == Approx(mv).epsilon(1e-9));
        const double by_difference = (stage.value(mv + 1e-3) - stage.value(mv - 1e-3)) / 2e-3;
        CHECK(stage.slope(mv) == Approx(by_difference).epsilon(1e-6));
    }
    CHECK(std::isinf(stage.inverse(300)));
    CHECK(Compression{}.value(750) == 750);
}

TEST_CASE("behind a compressive stage the error ratio is the mean over all patterns") {
    const Pulse pulse = pulse_of({180, 60, -25, 12});
    Disturbance noise;
    noise.noise_mv = 6;
    noise.late_mv = 4;
    noise.stage.knee_mv = 150;
    Slice slice;
    slice.fill(pulse, {}, noise, 6.1);
    const std::vector<double> taps = taps_at(pulse, 6.1);
    for (const double threshold : {-40.0, 0.0, 25.0, 50.0, 75.0}) {
        const double exact =
            over_patterns(taps, [&](double value) { return below_after(noise, value, threshold); });
        INFO("threshold " << threshold);
        CHECK(slice.lost_ones(threshold) == Approx(exact).epsilon(0.02).margin(1e-30));
    }
    const double level = slice.level_of_ones(1e-6);
    CHECK(slice.lost_ones(level) == Approx(1e-6).epsilon(1e-4));
}

TEST_CASE("a knee far above the signal is no stage at all") {
    const Pulse pulse = pulse_of({100, 30, -10});
    Disturbance noise;
    noise.noise_mv = 3;
    noise.late_mv = 2;
    Slice plain, far;
    plain.fill(pulse, {}, noise, 6.0);
    noise.stage.knee_mv = 1e6;
    far.fill(pulse, {}, noise, 6.0);
    for (const double threshold : {0.0, 20.0, 40.0})
        CHECK(far.error_ratio(threshold) == Approx(plain.error_ratio(threshold)).epsilon(1e-4));
}

TEST_CASE("an aggressor adds its taps at its own phase") {
    const Pulse pulse = pulse_of({120, 20});
    const Pulse coupled = pulse_of({40, -30});
    const std::vector<Aggressor> aggressors = {{&coupled, 0.5, 0.25}};
    Disturbance noise;
    noise.noise_mv = 5;
    Slice slice;
    slice.fill(pulse, aggressors, noise, 6.0);
    std::vector<double> taps = taps_at(pulse, 6.0);
    for (const double tap : taps_at(coupled, 6.25))
        if (std::abs(tap) > 1e-4) taps.push_back(0.5 * tap);
    for (const double threshold : {40.0, 60.0, 80.0}) {
        const double exact = over_patterns(
            taps, [&](double value) { return gaussian_tail((value - threshold) / 5.0); });
        CHECK(slice.lost_ones(threshold) == Approx(exact).epsilon(0.02));
    }
}

TEST_CASE("two samplers at one place disagree as their own noises make them") {
    const Pulse pulse = pulse_of({60, 35, -15});
    Disturbance noise;
    noise.noise_mv = 8;
    Slice slice;
    slice.fill(pulse, {}, noise, 6.0);
    const std::vector<double> taps = taps_at(pulse, 6.0);
    for (const double offset : {0.0, 30.0}) {
        const auto both = [&](double value) {
            return 0.5 * (gaussian_tail(value / 8) * gaussian_tail((value - offset) / 8) +
                          gaussian_tail(value / 8) * gaussian_tail((value + offset) / 8));
        };
        CHECK(slice.both_wrong(offset, slice, 0) ==
              Approx(over_patterns(taps, both)).epsilon(0.02));
    }
}

TEST_CASE("noise alone spreads the crossings by its sigma over the slope") {
    const Grid grid = short_grid();
    const double sigma_mv = 1.5;
    Eye eye(grid);
    eye.fill(bells(grid, {100}), {sigma_mv, 0.0}, {});
    const Pulse pulse = pulse_of({100});
    const double middle = eye.recovered_phase_ui() - 0.5;
    const auto swing = [&](double phase) { return pulse.at(phase) - pulse.at(phase + 1); };
    const double slope = std::abs(swing(middle + 0.01) - swing(middle - 0.01)) / 0.02;
    // Normal deviate of a thousandth: 3.0902, from any table.
    CHECK(eye.crossing_spread_ui() == Approx(2 * 3.0902 * sigma_mv / slope).epsilon(0.05));
    eye.fill(bells(grid, {100, 60, 40}), {sigma_mv, 0.0}, {});
    const double with_interference = eye.crossing_spread_ui();
    CHECK(with_interference > 0.2);
    CHECK(with_interference <= 1.0);
    eye.fill(bells(grid, {20, 60, 90, 60}), {60.0, 0.0}, {});
    CHECK(eye.crossing_spread_ui() == Approx(1.0));
}

TEST_CASE("the contour is highest near the middle and has the height that the margins tell") {
    const Grid grid = short_grid();
    Eye eye(grid);
    eye.fill(bells(grid, {100, 20, -5}), {2.0, 0.01}, {});
    const Margins margins = eye.margins(1e-6);
    const std::vector<double> contour = eye.contour_mv(1e-6, 33);
    REQUIRE(contour.size() == 33);
    CHECK(contour[16] == Approx(margins.up_mv).epsilon(1e-6));
    CHECK(contour.front() < 0);
    CHECK(contour.back() < 0);
}
