// Outside checks of the two-ports: package lines against the published model's formula at the
// parameters of the published sets, roughness and stub against their formulas.

#include <catch2/catch.hpp>
#include <cmath>
#include <vector>

#include "sim_target/physics/eye.hpp"
#include "sim_target/physics/gaussian.hpp"
#include "sim_target/physics/two_ports.hpp"

using namespace lanewright::sim;

namespace {

struct LineCheck {
    double ghz, loss_db, s21_db, s11_db, s21_degrees;
};

double decibel(Complex value) {
    return 20 * std::log10(std::abs(value));
}

void check_line(const PackageLine& line, const std::vector<LineCheck>& rows) {
    for (const LineCheck& row : rows) {
        INFO(line.length_mm << " mm at " << row.ghz << " GHz");
        const double f = row.ghz * 1e9;
        // 100 ohm differential: 50 for the half circuit.
        const Scattering s = scattering_of(chain_of(line, f), 50);
        CHECK(20 / std::log(10.0) * propagation(line, f).real() ==
              Approx(row.loss_db).margin(2e-6));
        CHECK(decibel(s.s21) == Approx(row.s21_db).margin(2e-6));
        CHECK(decibel(s.s11) == Approx(row.s11_db).margin(1e-5));
        CHECK(std::arg(s.s21) * 180 / M_PI == Approx(row.s21_degrees).margin(1e-3));
        CHECK(std::norm(s.s11) + std::norm(s.s21) < 1);
    }
}

}  // namespace

// IEEE 802.3 Annex 93A.1.2.3, parameters of Table 93A-3 (802.3bj package; 78.2 ohm differential
// from memory) and of Table 92-12 (board, from memory); values computed from its equations.
TEST_CASE("package and board lines have the scattering of IEEE 802.3 Annex 93A") {
    PackageLine line;
    line.length_mm = 12;
    line.impedance_ohm = 78.2 / 2;
    check_line(line, {{1, 0.195902, -0.256717, -18.991705, -28.4019},
                      {5.15625, 0.488601, -0.604322, -16.324038, -138.1991},
                      {12.890625, 0.844399, -0.884005, -23.738868, 16.2161}});
    line.length_mm = 30;
    check_line(line, {{1, 0.489754, -0.707743, -13.368882, -69.8048},
                      {5.15625, 1.221504, -1.263342, -25.067357, 12.8801},
                      {12.890625, 2.110998, -2.227343, -17.635270, -139.8776}});
    PackageLine board;
    board.length_mm = 151;
    board.impedance_ohm = 109.8 / 2;
    board.a1 = 4.114e-4;
    board.a2 = 2.547e-4;
    board.delay_ns_per_mm = 6.191e-3;
    check_line(board, {{1, 0.873636, -0.880699, -30.449491, 19.9635},
                       {5.15625, 2.947724, -2.973723, -23.610753, 68.5267},
                       {12.890625, 6.243480, -6.258571, -28.500268, 15.2199}});
}

TEST_CASE(
    "a package line of 100 ohm differential reflects nothing and loses what its formula says") {
    PackageLine line;
    line.impedance_ohm = 50;
    line.gamma0_per_mm = 5e-4;
    line.length_mm = 20;
    for (const double ghz : {0.5, 3.0, 14.0}) {
        const Scattering s = scattering_of(chain_of(line, ghz * 1e9), 50);
        CHECK(std::abs(s.s11) < 1e-12);
        const double nepers =
            (line.gamma0_per_mm + line.a1 * std::sqrt(ghz) + line.a2 * ghz) * line.length_mm;
        CHECK(decibel(s.s21) == Approx(-8.685889638 * nepers).epsilon(1e-8));
    }
}

// Two equally likely places of a crossing and Gaussian jitter at each: TJ = DJ + 2·Q·RJ (dual-Dirac
// model, INCITS TR-35-2004, from memory). Half of the bits have a transition and half of these each
// place, so the left edge lies where Q(x/RJ)/8 + (the other place's) is the error ratio: an error
// needs the bit before to differ (1/2) and the later place (1/2), and one bit of the two edges.
TEST_CASE("two places of a crossing and jitter close the eye as the dual-Dirac model says") {
    Grid grid;
    grid.window_ui = 16;
    const double rj_ui = 0.01, dj_ui = 0.1;
    // Straight edges of a whole unit interval; the symbol two before shifts them by ±dj/2.
    const double peak_mv = 200, echo_mv = dj_ui / 2 * 2 * peak_mv;
    std::vector<double> samples(grid.samples());
    for (std::size_t n = 0; n < samples.size(); ++n) {
        const double t = static_cast<double>(n) / 32.0 - 6.0;
        const auto flat = [&](double from, double to) { return t >= from && t < to ? 1.0 : 0.0; };
        samples[n] = peak_mv * std::max(0.0, 1 - std::abs(t));
        samples[n] += echo_mv * flat(1.5, 2.5);
    }
    Eye eye(grid);
    eye.fill(samples, {0.01, rj_ui}, {});
    const double recovered = eye.recovered_phase_ui();
    CHECK(recovered == Approx(6.0).margin(1e-3));
    for (const double ratio : {1e-4, 1e-6, 1e-9, 1e-12}) {
        const Margins margins = eye.margins(ratio);
        REQUIRE_FALSE(margins.closed);
        // The crossing lies half a unit interval from the centre, shifted by dj/2 at the worst.
        const double expected = 0.5 - dj_ui / 2 - rj_ui * gaussian_tail_inverse(4 * ratio);
        INFO("ratio " << ratio);
        CHECK(margins.left_ui == Approx(expected).margin(0.0015));
    }
}
