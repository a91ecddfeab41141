#pragma once
// Purpose:   what stands between chip and board: package lines and open stubs, as two-ports.
// Ownership: values only.
// Threads:   no shared state.
// Half circuits of the odd mode, as everywhere here: an impedance is half the differential one.

#include "sim_target/physics/channel.hpp"

namespace lanewright::sim {

// A line by IEEE 802.3 Annex 93A (93A.1.2.3): γ = γ0 + γ1·√f + γ2·f with γ1 = a1·(1 + j) and
// γ2 = a2·(1 − j·(2/π)·ln f) + j·2π·τ, f in GHz and length in mm. The numbers given here are those
// of the 802.3bj package (Table 93A-3), whose differential impedance is 78.2 ohm (from memory).
struct PackageLine {
    double length_mm = 12;
    double impedance_ohm = 39.1;
    double gamma0_per_mm = 0;
    double a1 = 1.734e-3;  // √ns per mm
    double a2 = 1.455e-4;  // ns per mm
    double delay_ns_per_mm = 6.141e-3;
    double ball_f = 0;  // capacitance to ground at the board's side
};

Complex propagation(const PackageLine& line, double frequency_hz);
// The line alone, without its ball capacitance.
Chain chain_of(const PackageLine& line, double frequency_hz);

// A line that hangs on the link and ends open: it takes away what it is a quarter wave long for.
struct Stub {
    double length_mm = 1;
    double impedance_ohm = 50;
    double permittivity = 3.7;
    double loss_tangent = 0.02;  // the same at all frequencies: a stub is short
};

// Quarter wave: c/(4·length·√permittivity).
double notch_hz(const Stub& stub);
Chain chain_of(const Stub& stub, double frequency_hz);

}  // namespace lanewright::sim
