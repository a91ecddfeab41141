#pragma once
// Purpose:   one lane of a target file as the solver needs it: chains from the source to the
//            equalizer's input at every frequency, spectra of the symbols, bank elements as this
//            die and temperature have them.
// Ownership: values only.
// Threads:   pure functions.

#include <array>
#include <string>
#include <vector>

#include "sim_target/physics/complex_math.hpp"
#include "sim_target/physics/network.hpp"
#include "sim_target/target_file.hpp"

namespace lanewright::sim {

struct LaneLink {
    std::vector<Chain> source;   // from the ideal source to node a, its impedance included
    double nyquist_loss_db = 0;  // of line or file alone, between matched ends
    std::string note;            // what the user must know of a file's frequencies
};

// Throws BadData for a Touchstone file that cannot be used. `symbol`: see below.
LaneLink link_of(const TargetFile& target, int lane, const std::vector<Cx>& symbol);

// Spectrum of one symbol as the transmitter sends it, in volts of open-circuit source voltage per
// hertz and times the bin width, so that the inverse transform gives volts. Edge filter of IEEE
// 802.3 Annex 93A, eq. (93A-46).
std::vector<Cx> symbol_spectrum(const TargetFile& target, int lane);

// What couples in at half the bit rate with 0 dB: for an aggressor at the far end a factor on the
// lane's own spectrum, for a near one the current into node a per volt of its symbols.
std::vector<Cx> coupling(const Grid& grid, const std::vector<Cx>& symbol);

// Banks, switches and line as process and temperature leave them. The draw of the process is
// keyed by the target's seed alone: one die.
Receiver receiver_at(const TargetFile& target);

}  // namespace lanewright::sim
