#pragma once
// Purpose:   the link up to the equalizer's input: chains of two-ports, a lossy line by published
//            formulas, and the frequencies at which everything is solved.
// Ownership: values only.
// Threads:   no shared state.
// Links are differential and balanced; everything here is the half circuit of the odd mode, so a
// 100 ohm pair appears as 50 ohm. Time dependence is e^(+jwt).

#include <complex>
#include <cstddef>
#include <vector>

namespace lanewright::sim {

using Complex = std::complex<double>;

// The frequencies and sampling of one lane. A waveform is periodic over `window_ui` unit
// intervals: what a pulse still carries after that comes round to the start of the window, so its
// sum is kept and nothing is cut off.
struct Grid {
    double bit_rate_hz = 25e9;
    std::size_t window_ui = 128;      // a power of two
    std::size_t samples_per_ui = 32;  // a power of two
    std::size_t top_bit_rates = 5;    // highest frequency, in bit rates

    std::size_t samples() const { return window_ui * samples_per_ui; }
    std::size_t points() const { return window_ui * top_bit_rates; }
    double step_hz() const { return bit_rate_hz / static_cast<double>(window_ui); }
    double frequency_hz(std::size_t index) const { return step_hz() * static_cast<double>(index); }
};

// Chain (ABCD) parameters: V1 = a·V2 + b·I2, I1 = c·V2 + d·I2, with I2 leaving port 2.
struct Chain {
    Complex a{1}, b{0}, c{0}, d{1};
};

Chain operator*(const Chain& first, const Chain& second);
Chain series_impedance(Complex ohm);
Chain shunt_admittance(Complex siemens);

struct Scattering {
    Complex s11, s12, s21, s22;
};

// s21 = 0 gives an infinite chain: the caller must keep |s21| above zero.
Chain chain_of(const Scattering& s, double reference_ohm);
Scattering scattering_of(const Chain& chain, double reference_ohm);

// A uniform line of given geometry.
// Conductor: internal impedance sqrt(Rdc² + (Rs(f)·(1+j)/w·m)²), Rs = sqrt(pi·f·mu0/sigma), current
// on m faces of a strip of width w (skin effect; the square root joins it to the direct-current
// resistance and keeps the response causal; common practice).
// Dielectric: wideband Debye with f1 = 1 kHz and f2 = 1 THz (Djordjevic, Biljic, Likar-Smiljanic,
// Sarkar, IEEE Trans. EMC 43(4), 2001), so that loss and delay belong together. The permittivity
// and loss tangent given hold at 1 GHz.
// Roughness: the skin effect's resistance and reactance times 1 + (2/pi)·atan(1.4·(rms/depth)²)
// (Hammerstad and Jensen, IEEE MTT-S Digest 1980, 407-409); acting on both keeps it near causal.
// From the place of an ImpedanceStep on, as a share of the length, the line has its impedance.
struct ImpedanceStep {
    double at_share = 0.5;
    double impedance_ohm = 50;
};

struct Line {
    double length_mm = 100;
    double impedance_ohm = 50;  // without loss, at 1 GHz
    double permittivity = 3.7;
    double loss_tangent = 0.01;
    double width_um = 127;
    double thickness_um = 17.5;
    double faces = 2;
    double conductivity_s_per_m = 5.8e7;
    double roughness_um = 0;           // rms; 0: smooth
    std::vector<ImpedanceStep> steps;  // in order of their places
};

// The factor of roughness on the skin effect's part.
double roughness_factor(double rms_um, double frequency_hz, double conductivity_s_per_m);

// Surface resistance of a thick conductor in ohm per square.
double surface_resistance_ohm(double frequency_hz, double conductivity_s_per_m);

// The fit of the wideband Debye model to one point, and its value.
struct Debye {
    double at_infinity = 0;  // relative permittivity far above f2
    double fall = 0;         // between far below f1 and far above f2
    static constexpr double f1_hz = 1e3, f2_hz = 1e12;
    static Debye fitted(double permittivity, double loss_tangent, double at_hz);
    Complex at(double frequency_hz) const;
};

// Complex propagation over the whole length (nepers and radians), as if it had no steps: these
// change the impedance and not what a wave loses. The line has no conductance at direct current,
// so this is zero there.
Complex propagation(const Line& line, double frequency_hz);
Chain chain_of(const Line& line, double frequency_hz);

// Loss between matched ends (reference: the line's own lossless impedance), in dB, positive.
double matched_loss_db(const Line& line, double frequency_hz);

}  // namespace lanewright::sim
