#include "sim_target/physics/two_ports.hpp"

#include <cmath>
#include <numbers>

namespace lanewright::sim {

namespace {

constexpr double pi = std::numbers::pi;
constexpr double light_m_per_s = 299792458.0;  // exact, SI

}  // namespace

Complex propagation(const PackageLine& line, double frequency_hz) {
    const double ghz = frequency_hz * 1e-9;
    if (ghz <= 0) return line.gamma0_per_mm * line.length_mm;
    const Complex skin = line.a1 * Complex(1, 1);
    const Complex dielectric =
        line.a2 * Complex(1, -2.0 / pi * std::log(ghz)) + Complex(0, 2 * pi * line.delay_ns_per_mm);
    return (line.gamma0_per_mm + skin * std::sqrt(ghz) + dielectric * ghz) * line.length_mm;
}

Chain chain_of(const PackageLine& line, double frequency_hz) {
    const Complex x = propagation(line, frequency_hz);
    const Complex sine = std::sinh(x), cosine = std::cosh(x);
    return {cosine, line.impedance_ohm * sine, sine / line.impedance_ohm, cosine};
}

double notch_hz(const Stub& stub) {
    return light_m_per_s / (4e-3 * stub.length_mm * std::sqrt(stub.permittivity));
}

Chain chain_of(const Stub& stub, double frequency_hz) {
    const Complex root = std::sqrt(Complex(1, -stub.loss_tangent));
    const Complex x{0, pi / 2 * frequency_hz / notch_hz(stub)};
    return shunt_admittance(root / stub.impedance_ohm * std::tanh(x * root));
}

}  // namespace lanewright::sim
