#pragma once
// Purpose:   the equalizer with everything that loads it, by nodal analysis: the transfer from the
//            transmitter to the sampler and the noise there, for any codes.
// Ownership: a Network owns its tables; nothing is shared.
// Threads:   const calls may run at the same time.
//
// Nodes: a, the receiver's input (channel, termination, pad, series banks) and out (series banks,
// shunt banks, load). Four banks in the order r1, c1, r2, c2: r1 and c1 from a to out, r2 and c2
// from out to ground. All that does not depend on the codes is worked out once. The channel is
// solved with the load that the codes make, so its reflections change with them.

#include <array>
#include <cstdint>
#include <span>
#include <vector>

#include "sim_target/physics/bank.hpp"
#include "sim_target/physics/channel.hpp"
#include "sim_target/physics/complex_math.hpp"

namespace lanewright::sim {

constexpr std::size_t bank_count = 4;
enum BankIndex : std::size_t { bank_r1 = 0, bank_c1 = 1, bank_r2 = 2, bank_c2 = 3 };

struct Receiver {
    double termination_ohm = 50;
    double pad_f = 0;     // at node a
    double load_f = 0;    // at node out: the sampler's input
    double load_ohm = 0;  // 0: none
    std::array<BankSpec, bank_count> banks;
};

struct Noise {
    double input_v_per_root_hz = 0;  // at an ideally terminated node a, differential, one-sided
    double temperature_k = 300;      // of every resistor and of the lossy channel
};

// What is solved for one set of codes.
struct Solution {
    std::vector<Cx> transfer;    // out over the transmitter's open-circuit voltage, each frequency
    std::vector<Cx> from_input;  // volts at out per ampere into node a
    double noise_v2 = 0;         // input and resistor noise at out, differential, mean square
    double resistor_noise_v2 = 0;  // the resistors' part of it
};

class Network {
  public:
    // `source`: at each frequency of the grid the chain from the ideal source to node a, with the
    // source's own impedance in it. `factors`: for each bank from element_factors, or empty.
    Network(const Grid& grid, std::span<const Chain> source, const Receiver& receiver,
            const Noise& noise, const std::array<std::vector<double>, bank_count>& factors);

    // Codes must lie inside their banks (has_codes()). Reuses the solution's memory.
    void solve(std::span<const int> codes, Solution& solution) const;

    bool has_codes(std::span<const int> codes) const;

  private:
    struct Series {
        Cx first, second, between;
    };
    Grid grid_;
    Noise noise_;
    double ideal_input_s_;  // admittance of an ideally terminated input
    std::array<int, bank_count> code_count_;
    std::vector<Cx> drive_;                     // Norton current per volt of the source
    std::vector<Cx> input_, output_;            // code-independent admittance at a and at out
    std::vector<std::vector<Series>> r1_, c1_;  // by code, then frequency
    std::vector<std::vector<Cx>> r2_, c2_;
};

}  // namespace lanewright::sim
