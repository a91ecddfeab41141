#include "sim_target/physics/channel.hpp"

#include <cmath>
#include <numbers>

namespace lanewright::sim {

namespace {

constexpr double pi = std::numbers::pi;
constexpr double light_m_per_s = 299792458.0;  // exact, SI
constexpr double mu0_h_per_m = 4e-7 * pi;

// sinh(x)/x, which the line equations need where x goes through zero.
Complex sinh_ratio(Complex x) {
    if (std::abs(x) < 1e-4) return 1.0 + x * x / 6.0;
    return std::sinh(x) / x;
}

struct PerMetre {
    Complex impedance_ohm, admittance_s;
};

PerMetre per_metre(const Line& line, double frequency_hz) {
    const double width_m = line.width_um * 1e-6;
    const double delay_s_per_m = std::sqrt(line.permittivity) / light_m_per_s;
    const double inductance_h = line.impedance_ohm * delay_s_per_m;
    const double capacitance_f = delay_s_per_m / line.impedance_ohm;
    const double omega = 2.0 * pi * frequency_hz;

    const double direct_ohm =
        1.0 / (line.conductivity_s_per_m * width_m * line.thickness_um * 1e-6);
    const double skin_ohm =
        surface_resistance_ohm(frequency_hz, line.conductivity_s_per_m) / (width_m * line.faces) *
        roughness_factor(line.roughness_um, frequency_hz, line.conductivity_s_per_m);
    // (skin·(1+j))² = 2j·skin²
    const Complex internal_ohm =
        std::sqrt(Complex(direct_ohm * direct_ohm, 2.0 * skin_ohm * skin_ohm));
    const Debye debye = Debye::fitted(line.permittivity, line.loss_tangent, 1e9);
    const Complex relative = debye.at(frequency_hz) / line.permittivity;
    return {internal_ohm + Complex(0, omega * inductance_h),
            Complex(0, omega * capacitance_f) * relative};
}

}  // namespace

Chain operator*(const Chain& first, const Chain& second) {
    return {first.a * second.a + first.b * second.c, first.a * second.b + first.b * second.d,
            first.c * second.a + first.d * second.c, first.c * second.b + first.d * second.d};
}

Chain series_impedance(Complex ohm) {
    return {1.0, ohm, 0.0, 1.0};
}

Chain shunt_admittance(Complex siemens) {
    return {1.0, 0.0, siemens, 1.0};
}

Chain chain_of(const Scattering& s, double reference_ohm) {
    const Complex two_s21 = 2.0 * s.s21;
    const Complex product = s.s12 * s.s21;
    return {((1.0 + s.s11) * (1.0 - s.s22) + product) / two_s21,
            reference_ohm * ((1.0 + s.s11) * (1.0 + s.s22) - product) / two_s21,
            ((1.0 - s.s11) * (1.0 - s.s22) - product) / (two_s21 * reference_ohm),
            ((1.0 - s.s11) * (1.0 + s.s22) + product) / two_s21};
}

Scattering scattering_of(const Chain& chain, double reference_ohm) {
    const Complex b = chain.b / reference_ohm;
    const Complex c = chain.c * reference_ohm;
    const Complex sum = chain.a + b + c + chain.d;
    const Complex determinant = chain.a * chain.d - chain.b * chain.c;
    return {(chain.a + b - c - chain.d) / sum, 2.0 * determinant / sum, 2.0 / sum,
            (-chain.a + b - c + chain.d) / sum};
}

double surface_resistance_ohm(double frequency_hz, double conductivity_s_per_m) {
    return std::sqrt(pi * frequency_hz * mu0_h_per_m / conductivity_s_per_m);
}

double roughness_factor(double rms_um, double frequency_hz, double conductivity_s_per_m) {
    if (rms_um <= 0 || frequency_hz <= 0) return 1.0;
    // Rs = 1/(conductivity·depth)
    const double depth_m =
        1.0 / (conductivity_s_per_m * surface_resistance_ohm(frequency_hz, conductivity_s_per_m));
    const double share = rms_um * 1e-6 / depth_m;
    return 1.0 + 2.0 / pi * std::atan(1.4 * share * share);
}

Debye Debye::fitted(double permittivity, double loss_tangent, double at_hz) {
    const Complex shape =
        std::log10(Complex(f2_hz, at_hz) / Complex(f1_hz, at_hz)) / std::log10(f2_hz / f1_hz);
    Debye debye;
    debye.fall = -permittivity * loss_tangent / shape.imag();
    debye.at_infinity = permittivity - debye.fall * shape.real();
    return debye;
}

Complex Debye::at(double frequency_hz) const {
    return at_infinity +
           fall / std::log10(f2_hz / f1_hz) *
               std::log10(Complex(f2_hz, frequency_hz) / Complex(f1_hz, frequency_hz));
}

Complex propagation(const Line& line, double frequency_hz) {
    const PerMetre metre = per_metre(line, frequency_hz);
    // Each root has its phase between 0 and 45 degrees: the product is the wave that decays.
    return std::sqrt(metre.impedance_ohm) * std::sqrt(metre.admittance_s) * line.length_mm * 1e-3;
}

namespace {

Chain uniform_chain(const Line& line, double frequency_hz) {
    const PerMetre metre = per_metre(line, frequency_hz);
    const double length_m = line.length_mm * 1e-3;
    const Complex x = propagation(line, frequency_hz);
    const Complex ratio = sinh_ratio(x);
    const Complex whole = std::cosh(x);
    return {whole, metre.impedance_ohm * length_m * ratio, metre.admittance_s * length_m * ratio,
            whole};
}

}  // namespace

Chain chain_of(const Line& line, double frequency_hz) {
    Line part = line;
    part.steps.clear();
    Chain whole;
    double from_share = 0;
    for (const ImpedanceStep& step : line.steps) {
        part.length_mm = line.length_mm * (step.at_share - from_share);
        whole = whole * uniform_chain(part, frequency_hz);
        part.impedance_ohm = step.impedance_ohm;
        from_share = step.at_share;
    }
    part.length_mm = line.length_mm * (1.0 - from_share);
    return whole * uniform_chain(part, frequency_hz);
}

double matched_loss_db(const Line& line, double frequency_hz) {
    const Scattering s = scattering_of(uniform_chain(line, frequency_hz), line.impedance_ohm);
    return -20.0 * std::log10(std::abs(s.s21));
}

}  // namespace lanewright::sim
