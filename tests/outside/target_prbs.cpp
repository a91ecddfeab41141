// Outside check of superposition: the response to one symbol, added up over the bits of PRBS9,
// against ngspice's transient analysis of the same network and bits. No compression, no noise.

#include <unistd.h>

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <numbers>
#include <sstream>
#include <vector>

#include "sim_target/physics/fourier.hpp"
#include "sim_target/physics/network.hpp"
#include "sim_target/physics/pulse.hpp"

using namespace lanewright::sim;

namespace {

constexpr double ui_s = 40e-12, edge_s = 16e-12;
constexpr double line_ohm = 42, line_s = 25e-12;  // without loss, mismatched at both ends
constexpr std::size_t lead_in = 24;               // bits, repeated from the end of the period

// x^9 + x^5 + 1 from all ones, ITU-T O.150 (05/96) clause 5.1; first bytes FF 83 DF 17.
std::vector<int> prbs9() {
    std::vector<int> bits;
    unsigned state = 0x1FF;
    for (int n = 0; n < 511; ++n) {
        bits.push_back(static_cast<int>((state >> 8U) & 1U));
        state = ((state << 1U) | (((state >> 8U) ^ (state >> 4U)) & 1U)) & 0x1FFU;
    }
    return bits;
}

Receiver simple_receiver() {
    Receiver receiver;
    receiver.pad_f = 110e-15;
    receiver.load_f = 30e-15;
    receiver.banks = {BankSpec{BankKind::resistor, 0, 420, 0},
                      {BankKind::capacitor, 0, 130e-15, 0},
                      {BankKind::resistor, 0, 380, 0},
                      {BankKind::capacitor, 0, 9e-15, 0}};
    return receiver;
}

// Edges of 16 ps around the boundaries of the bits, between -1 and 1 volt.
std::string netlist(const std::vector<int>& bits) {
    const Receiver receiver = simple_receiver();
    std::ostringstream out;
    out << std::scientific;
    out.precision(12);
    out << "prbs\nV1 src 0 PWL(0 " << 2 * bits.front() - 1;
    for (std::size_t n = 1; n < bits.size(); ++n) {
        if (bits[n] == bits[n - 1]) continue;
        const double at = static_cast<double>(n) * ui_s;
        out << "\n+ " << at - edge_s / 2 << ' ' << 2 * bits[n - 1] - 1 << ' ' << at + edge_s / 2
            << ' ' << 2 * bits[n] - 1;
    }
    out << ")\nRS src near 50\nT1 near 0 a 0 Z0=" << line_ohm << " TD=" << line_s
        << "\nRT a 0 50\nCP a 0 " << receiver.pad_f << "\nR1 a out " << receiver.banks[0].fixed
        << "\nC1 a out " << receiver.banks[1].fixed << "\nR2 out 0 " << receiver.banks[2].fixed
        << "\nC2 out 0 " << receiver.banks[3].fixed + receiver.load_f
        << "\n.options reltol=1e-5 abstol=1e-14 vntol=1e-8 chgtol=1e-19\n.control\n"
           "set wr_singlescale\nset numdgt=12\ntran 0.5p "
        << static_cast<double>(bits.size()) * ui_s
        << " 0 0.5p\nlinearize v(out)\nwrdata result v(out)\n.endc\n.end\n";
    return out.str();
}

struct Sample {
    double time_s, volt;
};

std::vector<Sample> simulated(const std::string& text) {
    const std::filesystem::path folder =
        std::filesystem::temp_directory_path() / ("lanewright-prbs-" + std::to_string(::getpid()));
    std::filesystem::create_directories(folder);
    std::ofstream(folder / "net.cir") << text;
    const std::string command =
        "cd '" + folder.string() + "' && ngspice -b net.cir > ngspice.log 2>&1";
    const int status = std::system(command.c_str());
    std::vector<Sample> samples;
    std::ifstream file(folder / "result");
    for (Sample row{}; file >> row.time_s >> row.volt;) samples.push_back(row);
    std::ostringstream log;
    log << std::ifstream(folder / "ngspice.log").rdbuf();
    std::error_code ignored;
    std::filesystem::remove_all(folder, ignored);
    INFO("ngspice is needed here; its exit status " << status << " and log:\n" << log.str());
    REQUIRE(samples.size() > 10000);
    return samples;
}

// Response to one symbol of +1 that begins at time zero.
Pulse target_pulse() {
    Grid grid;
    const Receiver receiver = simple_receiver();
    std::vector<Chain> source;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double angle = 2 * std::numbers::pi * grid.frequency_hz(k) * line_s;
        const Complex sine{0, std::sin(angle)};
        source.push_back(series_impedance(50) *
                         Chain{std::cos(angle), line_ohm * sine, sine / line_ohm, std::cos(angle)});
    }
    Solution solution;
    const std::vector<int> codes(bank_count, 0);
    Network(grid, source, receiver, {}, {}).solve(codes, solution);
    std::vector<Cx> spectrum;
    const auto sinc = [](double x) { return x == 0 ? 1.0 : std::sin(x) / x; };
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double x = std::numbers::pi * grid.frequency_hz(k);
        const double size = sinc(x * ui_s) * sinc(x * edge_s) * grid.step_hz() * ui_s;
        spectrum.emplace_back(solution.transfer[k].standard() * std::polar(size, -x * ui_s));
    }
    std::vector<double> wave(grid.samples());
    std::vector<Cx> work;
    RealInverseFourier(grid.samples()).run(spectrum, work, wave);
    Pulse pulse(grid);
    pulse.assign(wave);
    return pulse;
}

double at_time(const std::vector<Sample>& samples, double time_s) {
    const auto above = std::lower_bound(samples.begin() + 1, samples.end() - 1, time_s,
                                        [](const Sample& s, double t) { return s.time_s < t; });
    const Sample& b = *above;
    const Sample& a = *(above - 1);
    return a.volt + (b.volt - a.volt) * (time_s - a.time_s) / (b.time_s - a.time_s);
}

struct InnerEye {
    double lowest_one = 1e300, highest_zero = -1e300;
    void take(int bit, double volt) {
        if (bit != 0)
            lowest_one = std::min(lowest_one, volt);
        else
            highest_zero = std::max(highest_zero, volt);
    }
    double height() const { return lowest_one - highest_zero; }
};

}  // namespace

TEST_CASE("symbols added up over PRBS9 make the eye and the phase that ngspice makes") {
    const std::vector<int> period = prbs9();
    const std::vector<int> first = {1, 1, 1, 1, 1, 1, 1, 1, 1, 0, 0, 0, 0, 0, 1, 1,
                                    1, 1, 0, 1, 1, 1, 1, 1, 0, 0, 0, 1, 0, 1, 1, 1};
    REQUIRE(std::equal(first.begin(), first.end(), period.begin()));
    std::vector<int> bits(period.end() - lead_in, period.end());
    bits.insert(bits.end(), period.begin(), period.end());
    bits.push_back(period[0]);
    bits.push_back(period[1]);
    const std::vector<Sample> samples = simulated(netlist(bits));
    const Pulse pulse = target_pulse();
    const double phase_ui = pulse.recovered_phase_ui();
    std::vector<double> taps(pulse.grid().window_ui), slopes(taps.size());

    // The median crossing of ngspice's waveform, and half a unit interval.
    std::vector<double> crossings;
    for (std::size_t i = 1; i < samples.size(); ++i) {
        if (samples[i].time_s < lead_in * ui_s ||
            (samples[i].volt > 0) == (samples[i - 1].volt > 0))
            continue;
        const double share = samples[i - 1].volt / (samples[i - 1].volt - samples[i].volt);
        const double at =
            (samples[i - 1].time_s + share * (samples[i].time_s - samples[i - 1].time_s)) / ui_s;
        double from_ours = at - (phase_ui - 0.5);
        from_ours -= std::round(from_ours);
        crossings.push_back(from_ours);
    }
    REQUIRE(crossings.size() > 200);
    std::nth_element(crossings.begin(), crossings.begin() + 128, crossings.end());
    const double away_ui = crossings[crossings.size() / 2];
    CHECK(std::abs(away_ui) < 0.01);

    InnerEye theirs, ours;
    double worst = 0;
    pulse.take(phase_ui, taps, slopes);
    for (std::size_t n = lead_in; n < lead_in + period.size(); ++n) {
        const double spice = at_time(samples, (static_cast<double>(n) + phase_ui) * ui_s);
        double sum = 0;
        for (std::size_t k = 0; k < taps.size(); ++k) {
            const std::size_t from = (n + 4 * period.size() - lead_in - k) % period.size();
            // Of a periodic window the last places are symbols yet to come.
            const std::size_t later =
                (n + period.size() - lead_in + taps.size() - k) % period.size();
            sum += taps[k] * (2 * period[k + 4 < taps.size() ? from : later] - 1);
        }
        theirs.take(bits[n], spice);
        ours.take(bits[n], sum);
        worst = std::max(worst, std::abs(sum - spice));
    }
    INFO("inner height " << ours.height() << " V, ngspice " << theirs.height() << " V, phase "
                         << away_ui << " UI, largest difference " << worst << " V");
    CHECK(theirs.height() > 0.1);
    // 1 % or half a millivolt at a swing of two volts.
    CHECK(std::abs(ours.height() - theirs.height()) < std::max(0.01 * theirs.height(), 0.5e-3));
    CHECK(worst < 0.01);
}
