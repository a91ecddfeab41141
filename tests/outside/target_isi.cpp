// The target's statistics of intersymbol interference against published theory.

#include <catch2/catch.hpp>
#include <cmath>
#include <vector>

#include "sim_target/physics/eye.hpp"
#include "sim_target/physics/gaussian.hpp"
#include "sim_target/physics/isi.hpp"

using namespace lanewright::sim;

namespace {

// p(-1) = 0.05, p0 = 0.60, p1 = 0.20, p2 = -0.10, p3 = 0.05: a hand-checkable pulse.
const std::vector<double> other_taps = {0.05, 0.20, -0.10, 0.05};
constexpr double cursor = 0.60;

// A pulse whose samples at whole unit intervals from `first` on are the ones given, each held for
// half a unit interval to either side, where the eye at that phase cannot see what is between.
std::vector<double> held_pulse(const Grid& grid, std::size_t first,
                               const std::vector<double>& taps) {
    std::vector<double> pulse(grid.samples(), 0.0);
    const std::size_t per_ui = grid.samples_per_ui;
    for (std::size_t k = 0; k < taps.size(); ++k)
        for (std::size_t n = 0; n < per_ui; ++n)
            pulse[(first + k) * per_ui + n - per_ui / 2] = taps[k];
    return pulse;
}

}  // namespace

// Casper, Haycock, Mooney, Symp. VLSI Circuits 2002: eye height 2·(p0 − sum of |pk|) for ±1.
TEST_CASE("peak distortion of the worked pulse leaves an eye height of 0.40") {
    CHECK(peak_distortion(other_taps) == Approx(0.40).epsilon(1e-12));
    CHECK(2 * (cursor - peak_distortion(other_taps)) == Approx(0.40).epsilon(1e-12));
}

// Sum over the 16 patterns of Q((p0 + v)/sigma), computed independently in double precision;
// the method is that of Stojanovic, Horowitz, CICC 2003 (from memory).
TEST_CASE("the exact distribution of interference gives the error ratios of the worked pulse") {
    const std::vector<std::pair<double, double>> expected = {{0.02, 4.76240814e-25},
                                                             {0.03, 8.17745293e-13},
                                                             {0.04, 1.79157272e-8},
                                                             {0.05, 1.97957594e-6},
                                                             {0.08, 3.99192101e-4}};
    NoisyIsi isi;
    for (const auto& [sigma, ratio] : expected) {
        isi.fill(other_taps, sigma);
        CHECK(isi.below(-cursor) == Approx(ratio).epsilon(1e-6));
        // Far in the tail only the worst of 16 patterns counts.
        if (sigma == 0.02)
            CHECK(isi.below(-cursor) / gaussian_tail(0.2 / sigma) ==
                  Approx(1.0 / 16).epsilon(1e-4));
    }
}

// The levels v with P(one < v) = ratio for sigma = 0.02, computed with many digits.
TEST_CASE("the inner level of the ones lies where the worked pulse puts it") {
    NoisyIsi isi;
    isi.fill(other_taps, 0.02);
    const std::vector<std::pair<double, double>> expected = {{1e-3, 0.1571117876},
                                                             {1e-4, 0.1410431490},
                                                             {1e-6, 0.1168250873},
                                                             {1e-9, 0.0893974706},
                                                             {1e-12, 0.0672587870}};
    for (const auto& [ratio, level] : expected)
        CHECK(cursor + isi.level_at(ratio) == Approx(level).margin(1e-8));
}

TEST_CASE("the whole eye of the worked pulse has its error ratios at the centre and its heights") {
    Grid grid;
    grid.window_ui = 16;
    Eye eye(grid);
    for (const auto& [sigma, ratio] : std::vector<std::pair<double, double>>{
             {0.03, 8.17745293e-13}, {0.05, 1.97957594e-6}, {0.08, 3.99192101e-4}}) {
        eye.fill(held_pulse(grid, 4, {0.05, 0.60, 0.20, -0.10, 0.05}), {sigma, 0.0}, {});
        const double to_middle = 5.0 - eye.recovered_phase_ui();
        CHECK(eye.error_ratio_at(to_middle, 0.0) == Approx(ratio).epsilon(1e-6));
        // The edge where the ones alone lose 2e-6: half of all bits are ones.
        if (sigma < 0.04) {
            NoisyIsi isi;
            isi.fill(other_taps, sigma);
            const double edge = cursor + isi.level_at(2e-6);
            CHECK(eye.error_ratio_at(to_middle, edge) == Approx(1e-6).epsilon(1e-5));
        }
    }
}

// First-order RC channel, closed form: taps (1 − a)·a^k; three of them with a = 1/4.
TEST_CASE("the interference of a first-order channel is where the closed form has it") {
    const std::vector<double> taps = {3.0 / 16, 3.0 / 64, 3.0 / 256};
    const double sigma = 1e-5;
    NoisyIsi isi;
    isi.fill(taps, sigma);
    CHECK(isi.support_size() == 8);
    const std::vector<double> support = {-63, -57, -39, -33, 33, 39, 57, 63};
    for (std::size_t i = 0; i < support.size(); ++i) {
        const double at = support[i] / 256;
        CHECK(isi.below(at - 1e-3) == Approx(static_cast<double>(i) / 8).margin(1e-9));
        CHECK(isi.below(at + 1e-3) == Approx(static_cast<double>(i + 1) / 8).margin(1e-9));
    }
    double sum = 0;
    for (int k = 1; k < 60; ++k) sum += 0.75 * std::pow(0.25, k);
    CHECK(0.75 - sum == Approx(0.5).epsilon(1e-12));  // worst unipolar eye 1 − 2a
}

// Normal deviates of common error ratios; any table of the complementary error function.
TEST_CASE("the normal deviate of an error ratio agrees with the tables") {
    const std::vector<std::pair<double, double>> expected = {
        {1e-3, 3.09023231},  {1e-6, 4.75342431},  {1e-9, 5.99780702},
        {1e-12, 7.03448383}, {1e-15, 7.94134533}, {1e-18, 8.75729035}};
    for (const auto& [ratio, deviate] : expected) {
        CHECK(gaussian_tail_inverse(ratio) == Approx(deviate).margin(1e-8));
        CHECK(gaussian_tail(gaussian_tail_inverse(ratio)) == Approx(ratio).epsilon(1e-10));
    }
    CHECK(gaussian_tail(7.0) == Approx(1.279812544e-12).epsilon(1e-9));
    CHECK(gaussian_tail_inverse(0.5) == Approx(0.0).margin(1e-12));
    CHECK(gaussian_tail_inverse(0.9) == Approx(-gaussian_tail_inverse(0.1)));
}
