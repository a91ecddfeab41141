#include "adapt/search/response.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <numbers>

namespace lanewright {
namespace {

constexpr double two_pi = 2 * std::numbers::pi;
constexpr double hz_per_ghz = 1e9;

double decibel(double ratio) {
    return 20 * std::log10(ratio);
}
double ratio_of(double db) {
    return std::pow(10.0, db / 20);
}
double corner_ghz(double tau_s) {
    return 1 / (two_pi * tau_s) / hz_per_ghz;
}

bool usable(double value) {
    return value > 0 && std::isfinite(value);
}

bool usable(const Network& network) {
    return usable(network.r1_ohm) && usable(network.c1_farad) && usable(network.r2_ohm) &&
           usable(network.c2_farad);
}

bool usable(const Surroundings& around) {
    for (double value : {around.source_ohm, around.load_farad, around.load_siemens,
                         around.on_r1_ohm, around.on_c1_ohm, around.on_r2_ohm, around.on_c2_ohm}) {
        if (!(value >= 0) || !std::isfinite(value)) return false;
    }
    return true;
}

double parallel(double a, double b) {
    return a * b / (a + b);
}

// Admittance of a capacitor with a resistor in series, at s = j omega.
std::complex<double> branch(std::complex<double> s, double farad, double series_ohm) {
    return s * farad / (1.0 + s * series_ohm * farad);
}

}  // namespace

std::optional<Response> response_of(const Network& network) {
    if (!usable(network)) return std::nullopt;
    const auto& [r1, c1, r2, c2] = network;
    Response response;
    response.dc_db = decibel(r2 / (r1 + r2));
    response.hf_db = decibel(c1 / (c1 + c2));
    response.peaking_db = response.hf_db - response.dc_db;
    response.zero_ghz = corner_ghz(r1 * c1);
    response.pole_ghz = corner_ghz(parallel(r1, r2) * (c1 + c2));
    response.level_ohm = r1 + r2;
    return response;
}

std::optional<Network> network_of(const Response& response) {
    const double dc = ratio_of(response.dc_db);
    const double hf = ratio_of(response.hf_db);
    Network network;
    network.r2_ohm = response.level_ohm * dc;
    network.r1_ohm = response.level_ohm - network.r2_ohm;
    network.c1_farad = 1 / (two_pi * response.zero_ghz * hz_per_ghz * network.r1_ohm);
    network.c2_farad = network.c1_farad * (1 / hf - 1);
    if (!usable(network)) return std::nullopt;
    return network;
}

std::optional<Response> response_without_c2(const Network& network) {
    auto response = response_of(network);
    if (!response) return std::nullopt;
    response->hf_db = 0;
    response->peaking_db = decibel(1 + network.r1_ohm / network.r2_ohm);
    response->pole_ghz = corner_ghz(parallel(network.r1_ohm, network.r2_ohm) * network.c1_farad);
    return response;
}

std::optional<double> step_response(const Network& network, double time_s) {
    if (!usable(network)) return std::nullopt;
    if (time_s < 0) return 0;
    const auto& [r1, c1, r2, c2] = network;
    const double settled = r2 / (r1 + r2);
    const double at_once = c1 / (c1 + c2);
    const double tau_s = parallel(r1, r2) * (c1 + c2);
    return settled + (at_once - settled) * std::exp(-time_s / tau_s);
}

std::optional<std::complex<double>> transfer(const Network& network, const Surroundings& around,
                                             double frequency_hz) {
    if (!usable(network) || !usable(around)) return std::nullopt;
    if (!(frequency_hz >= 0) || !std::isfinite(frequency_hz)) return std::nullopt;
    const std::complex<double> s(0, two_pi * frequency_hz);
    const auto y1 =
        1 / (network.r1_ohm + around.on_r1_ohm) + branch(s, network.c1_farad, around.on_c1_ohm);
    const auto y2 = 1 / (network.r2_ohm + around.on_r2_ohm) +
                    branch(s, network.c2_farad, around.on_c2_ohm) + s * around.load_farad +
                    around.load_siemens;
    return 1.0 / (1.0 + y2 * (around.source_ohm + 1.0 / y1));
}

std::optional<LoadedResponse> loaded_response(const Network& network, const Surroundings& around) {
    if (!usable(network) || !usable(around)) return std::nullopt;
    const double r1 = network.r1_ohm, c1 = network.c1_farad, rs = around.source_ohm;
    const double r2 = 1 / (1 / network.r2_ohm + around.load_siemens);
    const double c2 = network.c2_farad + around.load_farad;
    const double tau_1 = r1 * c1, tau_2 = r2 * c2;

    // H(s) = r2 (1 + s tau_1) / (a + b s + c s^2); the roots without cancellation.
    const double a = rs + r1 + r2;
    const double b = r1 * r2 * (c1 + c2) + rs * (tau_1 + tau_2);
    const double c = rs * tau_1 * tau_2;
    const double sum = 0.5 * (b + std::sqrt(std::max(0.0, b * b - 4 * a * c)));

    LoadedResponse loaded;
    loaded.dc_db = decibel(r2 / a);
    loaded.zero_ghz = corner_ghz(tau_1);
    loaded.low_pole_ghz = a / sum / two_pi / hz_per_ghz;
    loaded.high_pole_ghz =
        c > 0 ? sum / c / two_pi / hz_per_ghz : std::numeric_limits<double>::infinity();

    // |H|^2 ~ (1 + f^2/fz^2) / [(1 + f^2/fp1^2)(1 + f^2/fp2^2)], set its derivative to zero.
    const double zero = loaded.zero_ghz * loaded.zero_ghz;
    const double low = loaded.low_pole_ghz * loaded.low_pole_ghz;
    const double high = loaded.high_pole_ghz * loaded.high_pole_ghz;
    if (std::isfinite(high) && 1 / zero > 1 / low + 1 / high) {
        const double peak = std::sqrt(std::sqrt((low - zero) * (high - zero)) - zero);
        const Surroundings no_switches{rs, around.load_farad, around.load_siemens, 0, 0, 0, 0};
        if (const auto gain = transfer(network, no_switches, peak * hz_per_ghz)) {
            loaded.peak_ghz = peak;
            loaded.peak_db = decibel(std::abs(*gain));
        }
    }
    return loaded;
}

std::optional<Network> network_of(const CodeSpace& space, const Codes& codes) {
    const auto element = [&](Part part) -> double {
        const auto dimension = space.find(part);
        if (!dimension || *dimension >= codes.value.size()) return 0;
        return space.nominal(*dimension, codes.value[*dimension]).value_or(0);
    };
    const Network network{element(Part::series_resistor), element(Part::series_capacitor),
                          element(Part::shunt_resistor), element(Part::shunt_capacitor)};
    if (!usable(network)) return std::nullopt;
    return network;
}

std::optional<Response> response_of(const CodeSpace& space, const Codes& codes) {
    const auto network = network_of(space, codes);
    return network ? response_of(*network) : std::nullopt;
}

}  // namespace lanewright
