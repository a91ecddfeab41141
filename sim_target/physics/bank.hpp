#pragma once
// Purpose:   switched banks of resistors and capacitors, as admittances between two nodes and
//            ground.
// Ownership: values only.
// Threads:   no shared state.
// A bank is one element that is always connected and, for each bit of its code, one element of
// binary weight behind a switch. A switch has an on-resistance and an off-capacitance, both scaled
// with its weight (a wider switch for a larger element). A capacitor has a bottom-plate capacitance
// to ground at each of its two nodes; the node between element and switch is one of them.

#include <complex>
#include <cstddef>
#include <cstdint>
#include <vector>

#include "sim_target/physics/channel.hpp"

namespace lanewright::sim {

enum class BankKind : std::uint8_t { resistor, capacitor };

struct BankSpec {
    BankKind kind = BankKind::resistor;
    int bits = 0;
    double fixed = 0;         // ohm or farad, always connected
    double unit = 0;          // ohm or farad of the element of weight 1; R/weight, C·weight
    double switch_ohm = 0;    // of weight 1; on-resistance/weight
    double switch_off_f = 0;  // of weight 1; off-capacitance·weight
    double plate_share = 0;   // bottom plate, share of the element, at each node; capacitors only
    double error_sigma = 0;   // relative error of an element, one standard deviation
    double small_below = 0;   // farad: capacitors smaller than this have small_error_sigma
    double small_error_sigma = 0;

    int codes() const { return 1 << bits; }
};

// The factors by which the elements of one bank of one lane differ from nominal: the fixed one
// first, then by weight. Drawn by (seed, lane, bank, element); an element never loses more than
// four fifths.
std::vector<double> element_factors(const BankSpec& spec, std::uint64_t seed, int lane, int bank);

// What the elements of a bank add to the nodal equations of its two nodes: current into the first
// is first·V1 − between·V2, into the second second·V2 − between·V1.
struct BranchAdmittance {
    Complex first, second, between;
};

// `factors` from element_factors, or empty for nominal elements.
BranchAdmittance bank_admittance(const BankSpec& spec, const std::vector<double>& factors, int code,
                                 double frequency_hz);

// What a designer would tabulate for each code: ohm at direct current with the switches that are
// closed in series with their elements, or farad of the elements connected. No element errors, no
// plates.
std::vector<double> nominal_table(const BankSpec& spec);

}  // namespace lanewright::sim
