#include "sim_target/physics/bank.hpp"

#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "sim_target/physics/network.hpp"

using namespace lanewright::sim;

namespace {

BankSpec resistor_bank() {
    BankSpec bank;
    bank.bits = 4;
    bank.fixed = 1000;
    bank.unit = 1900;
    bank.switch_ohm = 100;
    return bank;
}

BankSpec capacitor_bank() {
    BankSpec bank;
    bank.kind = BankKind::capacitor;
    bank.bits = 3;
    bank.fixed = 20e-15;
    bank.unit = 10e-15;
    bank.switch_ohm = 50;
    bank.switch_off_f = 1e-15;
    bank.plate_share = 0.08;
    return bank;
}

}  // namespace

TEST_CASE("a resistor bank's conductance is linear in its code") {
    const std::vector<double> table = nominal_table(resistor_bank());
    REQUIRE(table.size() == 16);
    CHECK(table[0] == Approx(1000));
    for (std::size_t code = 0; code < table.size(); ++code)
        CHECK(1.0 / table[code] == Approx(1e-3 + static_cast<double>(code) / 2000.0));
    const BankSpec bank = resistor_bank();
    for (int code = 0; code < 16; ++code) {
        const BranchAdmittance y = bank_admittance(bank, {}, code, 1e3);
        CHECK(y.between.real() == Approx(1.0 / table[static_cast<std::size_t>(code)]));
    }
}

TEST_CASE("a capacitor bank's capacitance is linear in its code far below its switches' corner") {
    const BankSpec bank = capacitor_bank();
    const std::vector<double> table = nominal_table(bank);
    REQUIRE(table.size() == 8);
    const double omega = 2 * 3.14159265358979 * 1e6;
    for (int code = 0; code < 8; ++code) {
        BankSpec plain = bank;
        plain.switch_off_f = 0;
        const BranchAdmittance y = bank_admittance(plain, {}, code, 1e6);
        CHECK(y.between.imag() / omega ==
              Approx(table[static_cast<std::size_t>(code)]).epsilon(1e-6));
        // Plates: 8 % of every element at the first node, whether its switch is closed or not.
        if (code == 7)
            CHECK((y.first - y.between).imag() / omega == Approx(0.08 * table[7]).epsilon(1e-3));
    }
}

TEST_CASE("an open switch leaves its off-capacitance in series with its element") {
    BankSpec bank = capacitor_bank();
    bank.plate_share = 0;
    const double frequency_hz = 10e9;
    const BranchAdmittance y = bank_admittance(bank, {}, 0, frequency_hz);
    double farad = bank.fixed;
    for (const double weight : {1.0, 2.0, 4.0})
        farad += weight * bank.unit * bank.switch_off_f / (bank.unit + bank.switch_off_f);
    CHECK(y.between.imag() == Approx(2 * 3.14159265358979 * frequency_hz * farad));
    CHECK(y.between.real() == Approx(0.0).margin(1e-12));
    CHECK(y.first.imag() == Approx(y.between.imag()));
}

TEST_CASE("element errors are fixed by seed, lane, bank and element and have the stated spread") {
    BankSpec bank = resistor_bank();
    bank.error_sigma = 0.04;
    CHECK(element_factors(bank, 5, 2, 0) == element_factors(bank, 5, 2, 0));
    CHECK(element_factors(bank, 5, 2, 0) != element_factors(bank, 5, 3, 0));
    CHECK(element_factors(bank, 5, 2, 0) != element_factors(bank, 5, 2, 1));
    CHECK(element_factors(bank, 5, 2, 0) != element_factors(bank, 6, 2, 0));
    double squares = 0;
    int count = 0;
    for (int lane = 0; lane < 400; ++lane) {
        for (const double factor : element_factors(bank, 5, lane, 0)) {
            squares += (factor - 1) * (factor - 1);
            ++count;
        }
    }
    CHECK(std::sqrt(squares / count) == Approx(0.04).epsilon(0.08));
    bank.error_sigma = 0.3;
    for (int lane = 0; lane < 400; ++lane)
        for (const double factor : element_factors(bank, 5, lane, 0)) CHECK(factor >= 0.2);
}

// Common practice: a passive network never amplifies.
TEST_CASE("the network never amplifies, whatever its codes") {
    Grid grid;
    Receiver receiver;
    receiver.pad_f = 100e-15;
    receiver.load_f = 30e-15;
    receiver.banks = {resistor_bank(), capacitor_bank(), resistor_bank(), capacitor_bank()};
    const std::vector<Chain> source(grid.points(), series_impedance(50.0));
    const Network network(grid, source, receiver, {}, {});
    std::mt19937 random(1);
    Solution solution;
    for (int trial = 0; trial < 50; ++trial) {
        std::vector<int> codes;
        for (const BankSpec& bank : receiver.banks)
            codes.push_back(static_cast<int>(random() % static_cast<unsigned>(bank.codes())));
        network.solve(codes, solution);
        double largest = 0;
        for (const Cx& value : solution.transfer)
            largest = std::max(largest, std::sqrt(squared_size(value)));
        CHECK(largest <= 0.5 + 1e-12);  // half remains behind a matched termination
        CHECK(largest > 0.05);
        CHECK(solution.resistor_noise_v2 > 0);
    }
}

// k·T/C: the mean square noise of a capacitor charged through any resistance (Nyquist 1928).
TEST_CASE("resistor noise into a capacitance is twice kT over C for the two halves") {
    Grid grid;
    grid.bit_rate_hz = 400e9;  // 2 THz of bandwidth and steps of 3 GHz
    Receiver receiver;
    receiver.termination_ohm = 1e9;
    receiver.load_f = 1e-12;
    BankSpec open;
    open.fixed = 1e12;
    BankSpec none;
    none.kind = BankKind::capacitor;
    none.fixed = 1e-21;
    BankSpec short_circuit;
    short_circuit.fixed = 1e-3;
    receiver.banks = {short_circuit, none, open, none};
    const std::vector<Chain> source(grid.points(), series_impedance(10.0));
    const Network network(grid, source, receiver, {0.0, 300.0}, {});
    Solution solution;
    network.solve(std::vector<int>{0, 0, 0, 0}, solution);
    const double expected = 2 * 1.380649e-23 * 300.0 / 1e-12;
    CHECK(solution.resistor_noise_v2 == Approx(expected).epsilon(0.01));
}

TEST_CASE("codes outside their banks are told apart") {
    Grid grid;
    Receiver receiver;
    receiver.banks = {resistor_bank(), capacitor_bank(), resistor_bank(), capacitor_bank()};
    const std::vector<Chain> source(grid.points(), series_impedance(50.0));
    const Network network(grid, source, receiver, {}, {});
    CHECK(network.has_codes(std::vector<int>{15, 7, 15, 7}));
    CHECK_FALSE(network.has_codes(std::vector<int>{16, 7, 15, 7}));
    CHECK_FALSE(network.has_codes(std::vector<int>{0, -1, 0, 0}));
    CHECK_FALSE(network.has_codes(std::vector<int>{0, 0, 0}));
}
