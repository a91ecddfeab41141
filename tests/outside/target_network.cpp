// The target's network against exact formulas and against ngspice, run here.

#include <unistd.h>

#include <catch2/catch.hpp>
#include <cmath>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <numbers>
#include <sstream>

#include "sim_target/physics/fourier.hpp"
#include "sim_target/physics/gaussian.hpp"
#include "sim_target/physics/network.hpp"

using namespace lanewright::sim;

namespace {

constexpr double pi = std::numbers::pi;

BankSpec fixed_bank(BankKind kind, double value) {
    BankSpec bank;
    bank.kind = kind;
    bank.fixed = value;
    return bank;
}

// Steps of 1 MHz up to 40 GHz.
Grid megahertz_grid() {
    Grid grid;
    grid.bit_rate_hz = 1.024e9;
    grid.window_ui = 1024;
    grid.top_bit_rates = 40;
    return grid;
}

std::vector<Cx> transfer_of(const Grid& grid, const Receiver& receiver, double source_ohm,
                            const std::vector<int>& codes) {
    const std::vector<Chain> source(grid.points(), series_impedance(source_ohm));
    Solution solution;
    Network(grid, source, receiver, {}, {}).solve(codes, solution);
    return solution.transfer;
}

double decibel(Cx value) {
    return 10 * std::log10(squared_size(value));
}

double degrees(Cx value) {
    return std::atan2(value.im, value.re) * 180 / pi;
}

struct Row {
    std::size_t mhz;
    double db, degree;
};

// The invented receiver of the comparisons with ngspice: every effect that the network has.
Receiver full_receiver() {
    Receiver receiver;
    receiver.pad_f = 150e-15;
    receiver.load_f = 35e-15;
    receiver.load_ohm = 20e3;
    BankSpec r1{BankKind::resistor, 3, 2200, 1200, 80, 0.4e-15, 0, 0};
    BankSpec c1{BankKind::capacitor, 3, 20e-15, 50e-15, 60, 1.2e-15, 0.08, 0};
    BankSpec r2{BankKind::resistor, 2, 1100, 500, 40, 0.5e-15, 0, 0};
    BankSpec c2{BankKind::capacitor, 2, 3e-15, 12e-15, 90, 0.6e-15, 0.1, 0};
    receiver.banks = {r1, c1, r2, c2};
    return receiver;
}

// One bank as a netlist: element, inner node, switch, plates.
void write_bank(std::ostream& out, const std::string& name, const BankSpec& bank, int code,
                const std::string& from, const std::string& to) {
    const bool resistor = bank.kind == BankKind::resistor;
    int count = 0;
    const auto part = [&](bool is_resistor, const std::string& a, const std::string& b,
                          double value) {
        out << (is_resistor ? "R" : "C") << name << count++ << ' ' << a << ' ' << b << ' ' << value
            << '\n';
    };
    part(resistor, from, to, bank.fixed);
    if (!resistor) {
        part(false, from, "0", bank.fixed * bank.plate_share);
        if (to != "0") part(false, to, "0", bank.fixed * bank.plate_share);
    }
    for (int bit = 0; bit < bank.bits; ++bit) {
        const double weight = 1 << bit;
        const std::string inner = "n" + name + std::to_string(bit);
        part(resistor, from, inner, resistor ? bank.unit / weight : bank.unit * weight);
        if (!resistor) {
            part(false, from, "0", bank.unit * weight * bank.plate_share);
            part(false, inner, "0", bank.unit * weight * bank.plate_share);
        }
        if (((code >> bit) & 1) != 0)
            part(true, inner, to, bank.switch_ohm / weight);
        else
            part(false, inner, to, bank.switch_off_f * weight);
        // ngspice wants a path to ground at direct current; 1e15 ohm changes nothing.
        part(true, inner, "0", 1e15);
    }
}

void write_network(std::ostream& out, const Receiver& receiver, double source_ohm,
                   const std::vector<int>& codes) {
    out << "RS src a " << source_ohm << "\nRT a 0 " << receiver.termination_ohm << "\nCP a 0 "
        << receiver.pad_f << "\nCL out 0 " << receiver.load_f << "\nRL out 0 " << receiver.load_ohm
        << '\n';
    write_bank(out, "r1", receiver.banks[bank_r1], codes[0], "a", "out");
    write_bank(out, "c1", receiver.banks[bank_c1], codes[1], "a", "out");
    write_bank(out, "r2", receiver.banks[bank_r2], codes[2], "out", "0");
    write_bank(out, "c2", receiver.banks[bank_c2], codes[3], "out", "0");
}

// Runs ngspice on a netlist that writes columns of numbers to `result`, and reads them.
std::vector<std::vector<double>> run_ngspice(const std::string& netlist) {
    const std::filesystem::path folder =
        std::filesystem::temp_directory_path() / ("lanewright-spice-" + std::to_string(::getpid()));
    std::filesystem::create_directories(folder);
    std::ofstream(folder / "net.cir") << netlist;
    const std::string command =
        "cd '" + folder.string() + "' && ngspice -b net.cir > ngspice.log 2>&1";
    const int status = std::system(command.c_str());
    std::vector<std::vector<double>> rows;
    std::ifstream file(folder / "result");
    for (std::string line; std::getline(file, line);) {
        std::istringstream words(line);
        std::vector<double> row;
        for (double value = 0; words >> value;) row.push_back(value);
        if (!row.empty()) rows.push_back(row);
    }
    std::ostringstream log;
    log << std::ifstream(folder / "ngspice.log").rdbuf();
    std::error_code ignored;
    std::filesystem::remove_all(folder, ignored);
    INFO("ngspice is needed here; its exit status " << status << " and log:\n" << log.str());
    REQUIRE_FALSE(rows.empty());
    return rows;
}

}  // namespace

// The exact response of the ideal four-element network by nodal analysis; values computed with
// ngspice 39 and double precision, which agree to 5e-11 dB.
TEST_CASE("the network without parasitics has the worked response of the ideal equalizer") {
    const Grid grid = megahertz_grid();
    Receiver receiver;
    receiver.termination_ohm = 1e15;
    receiver.banks = {fixed_bank(BankKind::resistor, 400), fixed_bank(BankKind::capacitor, 400e-15),
                      fixed_bank(BankKind::resistor, 400), fixed_bank(BankKind::capacitor, 50e-15)};
    const std::vector<Cx> h = transfer_of(grid, receiver, 1e-7, {0, 0, 0, 0});
    for (const Row& row :
         {Row{1, -6.020597, 0.02520}, Row{100, -5.990794, 2.50416}, Row{300, -5.765743, 7.15461},
          Row{1000, -4.192240, 15.66413}, Row{2000, -2.571699, 15.03905},
          Row{4000, -1.537767, 9.88506}, Row{8000, -1.163606, 5.37694},
          Row{16000, -1.059027, 2.74948}, Row{40000, -1.028846, 1.10685}}) {
        CHECK(decibel(h[row.mhz]) == Approx(row.db).margin(1e-6));
        CHECK(degrees(h[row.mhz]) == Approx(row.degree).margin(1e-5));
    }
    CHECK(decibel(h[0]) == Approx(-6.020600).margin(1e-6));
}

TEST_CASE("the network with source and load has the worked response") {
    const Grid grid = megahertz_grid();
    Receiver receiver;
    receiver.termination_ohm = 1e15;
    receiver.load_f = 30e-15;
    receiver.banks = {fixed_bank(BankKind::resistor, 600), fixed_bank(BankKind::capacitor, 250e-15),
                      fixed_bank(BankKind::resistor, 200), fixed_bank(BankKind::capacitor, 20e-15)};
    const std::vector<Cx> h = transfer_of(grid, receiver, 25, {0, 0, 0, 0});
    for (const Row& row : {Row{1, -12.308476, 0.03655}, Row{100, -12.273945, 3.63915},
                           Row{300, -12.009200, 10.56520}, Row{1000, -9.919005, 26.33230},
                           Row{2000, -7.050978, 30.51656}, Row{4000, -4.339543, 23.70162},
                           Row{8000, -2.961172, 12.40590}, Row{16000, -2.532818, 2.53498},
                           Row{40000, -2.596935, -10.24934}}) {
        CHECK(decibel(h[row.mhz]) == Approx(row.db).margin(1e-6));
        CHECK(degrees(h[row.mhz]) == Approx(row.degree).margin(1e-5));
    }
}

// Nodal analysis by hand: H = 1/[1 + Y2·(Rs + 1/Y1)], a termination folded into the source by
// Thevenin's theorem; open switches leave C·Coff/(C + Coff), open resistors R + 1/(s·Coff).
TEST_CASE("every combination of switches agrees with the admittances written out") {
    Grid grid;
    Receiver receiver = full_receiver();
    receiver.pad_f = 0;
    for (BankSpec& bank : receiver.banks) bank.plate_share = 0;
    const auto branch = [](const BankSpec& bank, int code, Complex s) {
        const bool resistor = bank.kind == BankKind::resistor;
        Complex sum = resistor ? Complex(1 / bank.fixed) : s * bank.fixed;
        for (int bit = 0; bit < bank.bits; ++bit) {
            const double weight = 1 << bit;
            const Complex element =
                resistor ? Complex(bank.unit / weight) : 1.0 / (s * bank.unit * weight);
            const Complex gate = ((code >> bit) & 1) != 0 ? Complex(bank.switch_ohm / weight)
                                                          : 1.0 / (s * bank.switch_off_f * weight);
            sum += 1.0 / (element + gate);
        }
        return sum;
    };
    double worst = 0;
    for (int index = 0; index < 1024; index += 7) {
        const std::vector<int> codes = {index % 8, index / 8 % 8, index / 64 % 4, index / 256};
        const std::vector<Cx> h = transfer_of(grid, receiver, 50, codes);
        for (std::size_t k = 1; k < grid.points(); k += 61) {
            const Complex s{0, 2 * pi * grid.frequency_hz(k)};
            const Complex y1 = branch(receiver.banks[bank_r1], codes[0], s) +
                               branch(receiver.banks[bank_c1], codes[1], s);
            const Complex y2 = branch(receiver.banks[bank_r2], codes[2], s) +
                               branch(receiver.banks[bank_c2], codes[3], s) + s * receiver.load_f +
                               1 / receiver.load_ohm;
            const Complex exact = 0.5 / (1.0 + y2 * (25.0 + 1.0 / y1));
            worst = std::max(worst, std::abs(h[k].standard() / exact - 1.0));
        }
    }
    CHECK(worst < 1e-9);
}

TEST_CASE("the network with every parasitic agrees with ngspice over frequency") {
    Grid grid;
    grid.bit_rate_hz = 25.6e9;  // steps of 200 MHz
    const Receiver receiver = full_receiver();
    for (const std::vector<int>& codes :
         {std::vector<int>{5, 3, 2, 1}, std::vector<int>{0, 7, 3, 0}}) {
        std::ostringstream netlist;
        netlist << std::scientific;
        netlist.precision(15);
        netlist << "equalizer\nV1 src 0 DC 0 AC 1\n";
        write_network(netlist, receiver, 50, codes);
        netlist << ".options reltol=1e-9\n.control\nset wr_singlescale\nset numdgt=14\n"
                   "ac lin 101 200meg 100.2g\nwrdata result vr(out) vi(out)\n.endc\n.end\n";
        const auto rows = run_ngspice(netlist.str());
        REQUIRE(rows.size() == 101);
        const std::vector<Cx> h = transfer_of(grid, receiver, 50, codes);
        double worst_db = 0;
        for (std::size_t i = 0; i < rows.size(); ++i) {
            const std::size_t k = 1 + 5 * i;
            REQUIRE(rows[i].size() == 3);
            REQUIRE(rows[i][0] == Approx(grid.frequency_hz(k)).epsilon(1e-9));
            worst_db =
                std::max(worst_db, std::abs(decibel(h[k]) - decibel({rows[i][1], rows[i][2]})));
        }
        CHECK(worst_db < 1e-6);
    }
}

// One symbol of 40 ps with Gaussian edges of 8 ps (one standard deviation), from the inverse
// transform of the network's response and from ngspice's transient analysis.
TEST_CASE("the response to one symbol agrees with ngspice over time") {
    Grid grid;
    const Receiver receiver = full_receiver();
    const std::vector<int> codes = {4, 5, 2, 1};
    const double ui_s = 40e-12, edge_s = 8e-12, start_s = 100e-12;
    std::ostringstream netlist;
    netlist << std::scientific;
    netlist.precision(12);
    netlist << "equalizer\nV1 src 0 PWL(";
    for (int n = 0; n <= 2000; ++n) {
        const double t = n * 0.125e-12;
        netlist << (n % 8 == 7 ? "\n+ " : " ") << t << ' '
                << gaussian_tail((start_s - t) / edge_s) -
                       gaussian_tail((start_s + ui_s - t) / edge_s);
    }
    netlist << ")\n";
    write_network(netlist, receiver, 50, codes);
    netlist << ".options reltol=1e-6 abstol=1e-15 vntol=1e-9 chgtol=1e-20\n.control\n"
               "set wr_singlescale\nset numdgt=12\ntran 0.25p 1n 0 0.25p\nlinearize v(out)\n"
               "wrdata result v(out)\n.endc\n.end\n";
    const auto rows = run_ngspice(netlist.str());

    const std::vector<Cx> h = transfer_of(grid, receiver, 50, codes);
    std::vector<Cx> spectrum;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double f = grid.frequency_hz(k);
        const double x = pi * f * ui_s;
        const double size = (k == 0 ? 1.0 : std::sin(x) / x) * ui_s * grid.step_hz() *
                            std::exp(-2 * std::pow(pi * f * edge_s, 2));
        spectrum.emplace_back(Complex(h[k].standard()) *
                              std::polar(size, -2 * pi * f * (start_s + ui_s / 2)));
    }
    std::vector<double> wave(grid.samples());
    std::vector<Cx> work;
    RealInverseFourier(grid.samples()).run(spectrum, work, wave);

    double worst = 0, largest = 0;
    std::size_t compared = 0;
    const double sample_s = ui_s / static_cast<double>(grid.samples_per_ui);  // 1.25 ps
    for (const auto& row : rows) {
        const double sample = row[0] / sample_s;
        const auto n = static_cast<std::size_t>(std::lround(sample));
        if (std::abs(sample - std::round(sample)) > 1e-3 || n >= wave.size()) continue;
        worst = std::max(worst, std::abs(wave[n] - row[1]));
        largest = std::max(largest, std::abs(row[1]));
        ++compared;
    }
    CHECK(compared > 500);
    CHECK(largest > 0.1);
    CHECK(worst < 1e-4);
}
