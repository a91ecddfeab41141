#include "sim_target/physics/link.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <numbers>

#include "sim_target/physics/keyed_random.hpp"

namespace lanewright::sim {

namespace {

constexpr double pi = std::numbers::pi;

const LaneChannel& lane_of(const TargetFile& target, int lane) {
    return target.lanes.at(static_cast<std::size_t>(lane));
}

double warmth_k(const TargetFile& target) {
    return target.temperature.celsius - target.temperature.reference_celsius;
}

Line line_at(const TargetFile& target, const Line& line) {
    Line warm = line;
    const double change_k = warmth_k(target);
    warm.conductivity_s_per_m /= std::max(0.1, 1.0 + target.temperature.conductor_per_k * change_k);
    warm.loss_tangent *= std::max(0.0, 1.0 + target.temperature.loss_tangent_per_k * change_k);
    return warm;
}

// A channel by itself, at the grid's points and what is said about it.
struct Channel {
    std::vector<Chain> chain;
    double nyquist_loss_db = 0;
    std::string note;
};

Channel line_channel(const Grid& grid, const Line& line) {
    Channel channel;
    for (std::size_t k = 0; k < grid.points(); ++k)
        channel.chain.push_back(chain_of(line, grid.frequency_hz(k)));
    channel.nyquist_loss_db = matched_loss_db(line, grid.bit_rate_hz / 2);
    return channel;
}

Chain repeated(const Chain& chain, int times) {
    Chain whole;
    for (int i = 0; i < times; ++i) whole = whole * chain;
    return whole;
}

MeasuredChannel measured(const TouchstoneChannel& source) {
    const Touchstone data = read_touchstone(source.path);
    if (data.ports == 2)
        return MeasuredChannel::from_two_ports(data, source.differential, source.path);
    return MeasuredChannel::from_four_ports(data, source.near, source.far, source.path);
}

Channel file_channel(const Grid& grid, const TouchstoneChannel& source,
                     const std::vector<Cx>& symbol) {
    const MeasuredChannel channel = measured(source);
    Channel out;
    double above = 0, all = 0;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double f = grid.frequency_hz(k);
        const Chain whole =
            repeated(chain_of(channel.at(f), channel.reference_ohm()), source.repeat);
        const double energy = std::norm(scattering_of(whole, channel.reference_ohm()).s21) *
                              squared_size(symbol[k]) * (k == 0 ? 0.5 : 1.0);
        all += energy;
        if (f > channel.last_hz()) above += energy;
        out.chain.push_back(whole);
    }
    const Chain nyquist = repeated(
        chain_of(channel.at(grid.bit_rate_hz / 2), channel.reference_ohm()), source.repeat);
    out.nyquist_loss_db =
        -20.0 * std::log10(std::abs(scattering_of(nyquist, channel.reference_ohm()).s21));
    std::array<char, 320> text{};
    std::snprintf(text.data(), text.size(),
                  "known from %.6g to %.6g GHz; extrapolated to direct current and beyond the last "
                  "point, where %.3g %% of the pulse's energy lies",
                  channel.first_hz() / 1e9, channel.last_hz() / 1e9, 100.0 * above / all);
    out.note = source.path + ": " + text.data();
    return out;
}

// The chip's end first where it is the transmitter's, last where it is the receiver's.
Chain package_end(const std::optional<PackageLine>& package, const std::optional<Stub>& stub,
                  double frequency_hz, bool chip_first) {
    Chain whole;
    const auto add = [&](const Chain& part) { whole = chip_first ? whole * part : part * whole; };
    if (package) {
        const Complex ball{0, 2.0 * pi * frequency_hz * package->ball_f};
        add(chain_of(*package, frequency_hz));
        add(shunt_admittance(ball));
    }
    if (stub) add(chain_of(*stub, frequency_hz));
    return whole;
}

// At three standard deviations a foundry's limits of acceptance cut off.
double drawn_scale(const TargetFile& target, std::uint64_t kind, double nominal, double sigma) {
    KeyedRandom random(target.seed, Purpose::process_scale, {kind});
    return nominal * (1.0 + sigma * std::clamp(random.normal(), -3.0, 3.0));
}

}  // namespace

LaneLink link_of(const TargetFile& target, int lane, const std::vector<Cx>& symbol) {
    const Grid& grid = target.grid;
    const LaneChannel& parts = lane_of(target, lane);
    Channel channel = parts.touchstone ? file_channel(grid, *parts.touchstone, symbol)
                                       : line_channel(grid, line_at(target, parts.line));
    LaneLink link;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double f = grid.frequency_hz(k);
        const Complex pad{0, 2.0 * pi * f * target.transmitter.pad_f};
        link.source.push_back(
            series_impedance(target.transmitter.source_ohm) * shunt_admittance(pad) *
            package_end(parts.near_package, parts.near_stub, f, true) * channel.chain[k] *
            package_end(parts.far_package, parts.far_stub, f, false));
    }
    link.nyquist_loss_db = channel.nyquist_loss_db;
    link.note = std::move(channel.note);
    return link;
}

std::vector<Cx> symbol_spectrum(const TargetFile& target, int lane) {
    const Grid& grid = target.grid;
    const Transmitter& transmitter = target.transmitter;
    const double swing_mv =
        lane_of(target, lane).swing_mv > 0 ? lane_of(target, lane).swing_mv : transmitter.swing_mv;
    const double cursor = 1.0 - std::abs(transmitter.pre_tap) - std::abs(transmitter.post_tap);
    std::vector<Cx> spectrum;
    // Into a matched load half of the source's voltage remains, and a symbol is half the swing.
    const double amplitude_v = swing_mv * 1e-3;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double f = grid.frequency_hz(k);
        const double x = pi * f / grid.bit_rate_hz;
        const double sinc = k == 0 ? 1.0 : std::sin(x) / x;
        const double edge = std::exp(-2.0 * std::pow(pi * f * transmitter.rise_s / 1.6832, 2));
        const double size = amplitude_v * sinc * edge * grid.step_hz() / grid.bit_rate_hz;
        Complex shape =
            std::polar(1.0, -x) * (cursor + transmitter.pre_tap * std::polar(1.0, 2.0 * x) +
                                   transmitter.post_tap * std::polar(1.0, -2.0 * x));
        if (transmitter.bandwidth_hz > 0) shape /= Complex(1.0, f / transmitter.bandwidth_hz);
        spectrum.emplace_back(shape * size);
    }
    return spectrum;
}

std::vector<Cx> coupling(const Grid& grid, const std::vector<Cx>& symbol) {
    const Complex nyquist{0, 1.0};
    const double size = std::abs(nyquist / (1.0 + nyquist / 2.0));
    std::vector<Cx> spectrum;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const Complex x{0, 2.0 * grid.frequency_hz(k) / grid.bit_rate_hz};
        spectrum.emplace_back(symbol[k].standard() * x / (1.0 + x / 2.0) / size);
    }
    return spectrum;
}

Receiver receiver_at(const TargetFile& target) {
    Receiver receiver = target.receiver;
    const Process& process = target.process;
    const Temperature& temperature = target.temperature;
    const double change_k = warmth_k(target);
    const auto warmed = [&](double per_k) { return std::max(0.1, 1.0 + per_k * change_k); };
    const double resistors =
        drawn_scale(target, 0, process.resistor_scale, process.resistor_sigma) *
        warmed(temperature.resistor_per_k);
    const double capacitors =
        drawn_scale(target, 1, process.capacitor_scale, process.capacitor_sigma) *
        warmed(temperature.capacitor_per_k);
    for (BankSpec& bank : receiver.banks) {
        const double scale = bank.kind == BankKind::resistor ? resistors : capacitors;
        bank.fixed *= scale;
        bank.unit *= scale;
        bank.switch_ohm *= warmed(temperature.switch_per_k);
    }
    return receiver;
}

}  // namespace lanewright::sim
