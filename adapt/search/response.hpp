#pragma once
// Purpose:   the response of the passive equalizer: series R1 with C1 across it, shunt R2 with C2
//            across it, exact by nodal analysis.
// Ownership: pure functions on values.
// Threads:   any.
// dB are 20 log10 of a voltage ratio. Element values must be above zero, else the result is empty.

#include <complex>
#include <cstdint>
#include <optional>

#include "adapt/search/code_space.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

struct Network {
    double r1_ohm = 0, c1_farad = 0, r2_ohm = 0, c2_farad = 0;
};

// The four-element network between an ideal source and no load. It has three freedoms (dc, hf,
// zero; the pole follows) and one impedance level, which it does not show itself.
struct Response {
    double dc_db = 0;       // 20 log10 R2/(R1+R2), never above 0
    double hf_db = 0;       // 20 log10 C1/(C1+C2), never above 0
    double peaking_db = 0;  // hf - dc; above 0 if and only if R1 C1 > R2 C2
    double zero_ghz = 0;    // 1 / (2 pi R1 C1)
    double pole_ghz = 0;    // 1 / (2 pi (R1 || R2)(C1 + C2))
    double level_ohm = 0;   // R1 + R2
};

std::optional<Response> response_of(const Network& network);

// The network whose response that is: the inverse. dc_db, hf_db below 0; pole and peaking are not
// read, they follow from the others.
std::optional<Network> network_of(const Response& response);

// The trade's approximation, which leaves C2 out: hf 0 dB, peaking 1 + R1/R2, pole
// 1 / (2 pi (R1 || R2) C1). Against the exact response peaking is too high by
// 20 log10(1 + C2/C1) dB and the pole by 1 + C2/C1.
std::optional<Response> response_without_c2(const Network& network);

// Output of the ideal network for a unit step at its input, `time_s` after it; 0 before.
std::optional<double> step_response(const Network& network, double time_s);

// What stands around the network and inside its switches. Defaults are the ideal case.
struct Surroundings {
    double source_ohm = 0;
    double load_farad = 0;
    double load_siemens = 0;                                            // 1 / load resistance
    double on_r1_ohm = 0, on_c1_ohm = 0, on_r2_ohm = 0, on_c2_ohm = 0;  // in series with each
};

// Output over source voltage at one frequency: 1 / (1 + Y2 (Rs + 1/Y1)). Frequency 0 or above.
std::optional<std::complex<double>> transfer(const Network& network, const Surroundings& around,
                                             double frequency_hz);

// Poles and peak with source and load but without switch resistance: one zero, two real poles.
struct LoadedResponse {
    double dc_db = 0, zero_ghz = 0, low_pole_ghz = 0;
    double high_pole_ghz = 0;        // infinite without source resistance
    std::optional<double> peak_ghz;  // of the magnitude; empty: no peak at a finite frequency
    std::optional<double> peak_db;
};
std::optional<LoadedResponse> loaded_response(const Network& network, const Surroundings& around);

// Nominal elements and response of a lane's codes; empty where one of the four parts is not a
// dimension of the space or its table does not hold the code.
std::optional<Network> network_of(const CodeSpace& space, const Codes& codes);
std::optional<Response> response_of(const CodeSpace& space, const Codes& codes);

}  // namespace lanewright
