// The target's channel against closed forms, constants of the literature and public measurements.

#include <catch2/catch.hpp>
#include <cmath>
#include <cstdio>
#include <cstdlib>
#include <numbers>
#include <vector>

#include "sim_target/physics/channel.hpp"
#include "sim_target/physics/fourier.hpp"
#include "sim_target/physics/touchstone.hpp"

using namespace lanewright::sim;

namespace {

constexpr double pi = std::numbers::pi;
const double neper_db = 20.0 / std::log(10.0);

// A line with skin effect only, so long that its loss a millimetre is next to nothing: then
// the propagation is K·sqrt(s) beside the delay, without the second-order term K²/(2·delay).
Line skin_line(double loss_db, double at_hz) {
    Line line;
    line.loss_tangent = 0;
    line.width_um = 20000;
    line.thickness_um = 1e7;  // no resistance at direct current
    line.faces = 2;
    const double neper_per_m = surface_resistance_ohm(at_hz, line.conductivity_s_per_m) /
                               (2 * line.impedance_ohm * line.width_um * 1e-6 * line.faces);
    line.length_mm = 1e3 * loss_db / neper_db / neper_per_m;
    return line;
}

// Response to a pulse of one unit interval from time zero, with the line's delay taken out.
std::vector<double> pulse_of(const Line& line, const Grid& grid) {
    const double delay_s = line.length_mm * 1e-3 * std::sqrt(line.permittivity) / 299792458.0;
    std::vector<Cx> spectrum;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double f = grid.frequency_hz(k);
        const double x = pi * f / grid.bit_rate_hz;
        const double sinc = k == 0 ? 1.0 : std::sin(x) / x;
        const Complex rest = std::exp(Complex(0, 2 * pi * f * delay_s - x) - propagation(line, f));
        spectrum.emplace_back(rest * sinc * grid.step_hz() / grid.bit_rate_hz);
    }
    std::vector<double> wave(grid.samples());
    std::vector<Cx> work;
    RealInverseFourier(grid.samples()).run(spectrum, work, wave);
    return wave;
}

Grid fine_grid() {
    Grid grid;
    grid.bit_rate_hz = 8e9;
    grid.window_ui = 2048;
    grid.samples_per_ui = 64;
    grid.top_bit_rates = 31;
    return grid;
}

double transfer_db(const MeasuredChannel& channel, double frequency_hz) {
    return 20 * std::log10(std::abs(channel.at(frequency_hz).s21));
}

}  // namespace

// Surface resistance of copper, sigma = 5.8e7 S/m: 1/(sigma·skin depth), any field theory text.
TEST_CASE("copper has its surface resistance and a strip its loss an inch") {
    CHECK(surface_resistance_ohm(1e9, 5.8e7) == Approx(8.25023e-3).epsilon(1e-5));
    CHECK(surface_resistance_ohm(10e9, 5.8e7) == Approx(26.0895e-3).epsilon(1e-5));
    Line line;
    line.width_um = 127;
    line.faces = 1;
    line.loss_tangent = 0;
    line.thickness_um = 1e6;
    line.length_mm = 25.4;
    // Rs/(2·Z0·w) to first order, 5 mil and 50 ohm
    CHECK(propagation(line, 1e9).real() * neper_db == Approx(0.143321).epsilon(0.02));
    CHECK(propagation(line, 4e9).real() * neper_db == Approx(0.286642).epsilon(0.01));
    CHECK(propagation(line, 12.890625e9).real() * neper_db == Approx(0.514573).epsilon(0.01));
}

// pi·f·sqrt(er)·tan(delta)/c, the usual low-loss formula: 2.311943·f·sqrt(er)·tan(delta) dB an
// inch.
TEST_CASE("dielectric loss is the low-loss formula's at the frequency of its fit") {
    Line line;
    line.permittivity = 4.3;
    line.loss_tangent = 0.02;
    line.length_mm = 25.4;
    line.conductivity_s_per_m = 1e20;
    CHECK(propagation(line, 1e9).real() * neper_db == Approx(0.095883).epsilon(1e-3));
}

// Ten inches, er 3.7, tan(delta) 0.01, 5 mil, two faces: the sum of both formulas.
TEST_CASE("a line with both losses has their sum") {
    Line line;
    line.length_mm = 254;
    line.thickness_um = 1e6;
    for (const auto& [f, loss_db] :
         std::vector<std::pair<double, double>>{{1e9, 1.16132}, {4e9, 3.21206}, {8e9, 5.58456}})
        // The loss tangent of the causal dielectric rises by 2 % over this decade.
        CHECK(propagation(line, f).real() * neper_db == Approx(loss_db).epsilon(0.03));
}

// Djordjevic, Biljic, Likar-Smiljanic, Sarkar, IEEE Trans. EMC 43(4), 2001: the model (formula from
// memory); values computed independently for er 4.3, tan(delta) 0.02 at 1 GHz, 1 kHz to 1 THz.
TEST_CASE("the wideband Debye dielectric has the values of its formula") {
    const Debye debye = Debye::fitted(4.3, 0.02, 1e9);
    CHECK(debye.at_infinity == Approx(3.921564).epsilon(1e-6));
    CHECK(debye.fall == Approx(1.135308).epsilon(1e-6));
    struct Row {
        double f, real, loss;
    };
    for (const Row& row :
         {Row{1e6, 4.678436, 0.086000}, Row{1e7, 4.552291, 0.086049}, Row{1e8, 4.426145, 0.086049},
          Row{1e9, 4.300000, 0.086000}, Row{5e9, 4.211829, 0.085781}, Row{10e9, 4.173857, 0.085507},
          Row{50e9, 4.085751, 0.083318}}) {
        CHECK(debye.at(row.f).real() == Approx(row.real).margin(2e-6));
        CHECK(-debye.at(row.f).imag() == Approx(row.loss).margin(1e-6));
    }
}

// Step response erfc(K/(2·sqrt(t))) of exp(−K·sqrt(s)): Wigington and Nahman, Proc. IRE 45, 1957
// (from memory). K = a/sqrt(pi·f0) with a the loss at f0 in nepers.
TEST_CASE("a line with skin effect only has the pulse response of the closed form") {
    const Grid grid = fine_grid();
    for (const double loss_db : {6.0, 10.0, 20.0}) {
        const std::vector<double> wave = pulse_of(skin_line(loss_db, 4e9), grid);
        const double k = loss_db / neper_db / std::sqrt(pi * 4e9);
        const auto step = [&](double t) {
            return t <= 0 ? 0.0 : std::erfc(k / (2 * std::sqrt(t)));
        };
        double worst = 0;
        for (std::size_t n = 0; n < 20 * grid.samples_per_ui; n += 8) {
            const double t = static_cast<double>(n) / 64 * 125e-12;
            worst = std::max(worst, std::abs(wave[n] - (step(t) - step(t - 125e-12))));
        }
        INFO("loss " << loss_db);
        CHECK(worst < 2e-4);
    }
}

// Values of the same closed form with many digits, 125 ps unit interval.
TEST_CASE("the skin-effect pulse has its published cursor, tail and worst eye") {
    const Grid grid = fine_grid();
    const std::vector<double> six = pulse_of(skin_line(6, 4e9), grid);
    const std::vector<double> expected = {0.69673743,  0.086133582, 0.039100665,
                                          0.023527606, 0.016136850, 0.011949284};
    for (std::size_t i = 0; i < expected.size(); ++i)
        CHECK(six[(i + 1) * 64] == Approx(expected[i]).margin(1e-4));

    const std::vector<double> twenty = pulse_of(skin_line(20, 4e9), grid);
    const auto peak = std::max_element(twenty.begin(), twenty.end());
    CHECK(*peak == Approx(0.236864).margin(1e-4));
    const double peak_s = static_cast<double>(peak - twenty.begin()) / 64 * 125e-12;
    CHECK(peak_s == Approx(161.9e-12).margin(2e-12));

    // Worst unipolar eye over the whole tail, 2·p0 − 1: the periodic window keeps all of it.
    const std::vector<double> ten = pulse_of(skin_line(10, 4e9), grid);
    double others = 0;
    for (std::size_t ui = 0; ui < grid.window_ui; ++ui)
        if (ui != 1) others += std::abs(ten[ui * 64]);
    CHECK(ten[64] == Approx(0.51598471).margin(1e-4));
    CHECK(ten[64] - others == Approx(0.031969416).margin(3e-4));
}

// The taps that matter, and what all the others add up to from the closed form: with unit gain at
// direct current and no precursor all taps add up to 1, so those after tap n to 1 − step(n·T).
TEST_CASE("taps under a thousandth of the cursor add up to what the closed form says") {
    const Grid grid = fine_grid();
    for (const double loss_db : {6.0, 10.0}) {
        const std::vector<double> wave = pulse_of(skin_line(loss_db, 4e9), grid);
        const double k = loss_db / neper_db / std::sqrt(pi * 4e9);
        const auto step = [&](double ui) { return std::erfc(k / (2 * std::sqrt(ui * 125e-12))); };
        const double cursor = wave[64];
        double kept = 0;
        std::size_t last = 1;
        for (std::size_t ui = 2; ui < grid.window_ui; ++ui) {
            if (std::abs(wave[ui * 64]) < 1e-3 * cursor) break;
            kept += std::abs(wave[ui * 64]);
            last = ui;
        }
        const double neglected = 1 - step(static_cast<double>(last));
        double tail = 0;
        for (std::size_t ui = last + 1; ui < grid.window_ui; ++ui) tail += wave[ui * 64];
        const double worst = cursor - kept - neglected;
        std::printf("%g dB: %zu taps kept, %.6f of all neglected, worst case %.6f\n", loss_db, last,
                    neglected, worst);
        CHECK(last < 200);
        CHECK(neglected > 0.01);
        // The periodic window keeps the tail's sum; up to 64 taps, each some 1e-5 from the closed
        // form, as the spectrum ends at 31 bit rates.
        CHECK(tail + wave[0] == Approx(neglected).margin(6e-4));
        CHECK(worst == Approx(2 * step(1) - 1).margin(6e-4));
    }
}

// Example networks of IEEE P370 as carried by the RF library scikit-rf (BSD-3-Clause); their
// differential transfer as published with them.
TEST_CASE("public four-port measurements have their published differential transfer") {
    const char* folder = std::getenv("LANEWRIGHT_CHANNEL_DATA");
    if (folder == nullptr || *folder == '\0') {
        WARN("left out: LANEWRIGHT_CHANNEL_DATA names no folder with the public channel files");
        return;
    }
    struct Row {
        const char* name;
        std::vector<double> db;
    };
    for (const Row& row : {Row{"p370_2x_thru.s4p", {-0.18, -0.64, -1.24, -1.54}},
                           Row{"p370_fixture_dut_fixture.s4p", {-1.06, -1.34, -2.64, -4.45}}}) {
        const std::string path = std::string(folder) + "/" + row.name;
        const Touchstone data = read_touchstone(path);
        CHECK(data.frequency_hz.size() == 1000);
        const MeasuredChannel channel =
            MeasuredChannel::from_four_ports(data, {1, 2}, {3, 4}, path);
        const std::vector<double> at_ghz = {1, 4, 8, 10};
        for (std::size_t i = 0; i < at_ghz.size(); ++i) {
            INFO(row.name << " at " << at_ghz[i] << " GHz");
            CHECK(transfer_db(channel, at_ghz[i] * 1e9) == Approx(row.db[i]).margin(0.006));
        }
        // Beyond the last point it loses more, and never gains (common practice for passive parts).
        CHECK(transfer_db(channel, 40e9) < row.db[3]);
        CHECK(std::abs(channel.at(0).s21) <= 1.0);
        CHECK(std::abs(channel.at(0).s21) > 0.9);
    }
}
