#include "sim_target/physics/truth.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <numbers>
#include <numeric>
#include <stdexcept>

#include "sim_target/physics/fourier.hpp"
#include "sim_target/physics/keyed_random.hpp"

namespace lanewright::sim {

namespace {

constexpr double pi = std::numbers::pi;

// Spectrum of one symbol as the transmitter sends it, in volts of open-circuit source voltage per
// hertz and times the bin width, so that the inverse transform gives volts. Edge filter of IEEE
// 802.3 Annex 93A, eq. (93A-46).
std::vector<Cx> symbol_spectrum(const Grid& grid, const Transmitter& transmitter) {
    std::vector<Cx> spectrum;
    // Into a matched load half of the source's voltage remains, and a symbol is half the swing.
    const double amplitude_v = transmitter.swing_mv * 1e-3;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const double f = grid.frequency_hz(k);
        const double x = pi * f / grid.bit_rate_hz;
        const double sinc = k == 0 ? 1.0 : std::sin(x) / x;
        const double edge = std::exp(-2.0 * std::pow(pi * f * transmitter.rise_s / 1.6832, 2));
        const double size = amplitude_v * sinc * edge * grid.step_hz() / grid.bit_rate_hz;
        spectrum.emplace_back(std::polar(1.0, -x) * size);
    }
    return spectrum;
}

struct ChannelChains {
    std::vector<Chain> chain;  // of the channel alone
    double nyquist_loss_db = 0;
    std::string note;
};

ChannelChains line_chains(const Grid& grid, const Line& line) {
    ChannelChains channel;
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

ChannelChains file_chains(const Grid& grid, const TouchstoneChannel& source,
                          std::span<const Cx> symbol) {
    const MeasuredChannel channel = measured(source);
    ChannelChains out;
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

Decision decision_of(const TargetFile& target, int lane) {
    const auto lane_word = static_cast<std::uint64_t>(lane);
    KeyedRandom offset(target.seed, Purpose::decision_offset, {lane_word});
    KeyedRandom phase(target.seed, Purpose::phase_offset, {lane_word});
    Decision decision;
    decision.offset_mv = target.spread.offset_sigma_mv * offset.normal();
    decision.phase_ui = std::clamp(target.spread.phase_sigma_ui * phase.normal(), -0.2, 0.2);
    return decision;
}

Network network_of(const TargetFile& target, int lane, std::span<const Chain> channel) {
    const Grid& grid = target.grid;
    std::vector<Chain> source;
    for (std::size_t k = 0; k < grid.points(); ++k) {
        const Complex pad{0, 2.0 * pi * grid.frequency_hz(k) * target.transmitter.pad_f};
        source.push_back(series_impedance(target.transmitter.source_ohm) * shunt_admittance(pad) *
                         channel[k]);
    }
    std::array<std::vector<double>, bank_count> factors;
    for (std::size_t bank = 0; bank < bank_count; ++bank)
        factors[bank] =
            element_factors(target.receiver.banks[bank], target.seed, lane, static_cast<int>(bank));
    return Network(grid, source, target.receiver, target.noise, factors);
}

}  // namespace

struct Oracle::Parts {
    Parts(const TargetFile& target, int lane_number, ChannelChains channel,
          std::vector<Cx> symbol_in)
        : grid(target.grid),
          symbol(std::move(symbol_in)),
          network(network_of(target, lane_number, channel.chain)),
          fourier(target.grid.samples()),
          sampler_noise_mv(target.sampler_noise_mv),
          sampler_jitter_ui(target.sampler_jitter_ui),
          decision(decision_of(target, lane_number)),
          monitor(target.monitor),
          lane(lane_number),
          nyquist_loss_db(channel.nyquist_loss_db),
          note(std::move(channel.note)) {
        for (const BankSpec& bank : target.receiver.banks) code_counts.push_back(bank.codes());
    }

    Grid grid;
    std::vector<Cx> symbol;
    Network network;
    RealInverseFourier fourier;
    double sampler_noise_mv, sampler_jitter_ui;
    Decision decision;
    LatchedMonitor monitor;
    int lane;
    double nyquist_loss_db;
    std::string note;
    std::vector<int> code_counts;
};

namespace {

struct Workspace {
    Solution solution;
    std::vector<Cx> spectrum, work;
    std::vector<double> wave;
};

template <class Parts>
double solve_pulse(const Parts& parts, const std::vector<int>& codes, Workspace& space) {
    if (!parts.network.has_codes(codes)) throw std::out_of_range("codes outside their banks");
    parts.network.solve(codes, space.solution);
    const std::size_t points = parts.symbol.size();
    space.spectrum.resize(points);
    for (std::size_t k = 0; k < points; ++k)
        space.spectrum[k] = 1e3 * (space.solution.transfer[k] * parts.symbol[k]);
    space.wave.resize(parts.grid.samples());
    parts.fourier.run(space.spectrum, space.work, space.wave);
    return std::sqrt(space.solution.noise_v2 * 1e6 +
                     parts.sampler_noise_mv * parts.sampler_noise_mv);
}

// Eye and buffers of this thread; their size follows the grid, which differs between targets.
template <class Parts>
Eye& filled_eye(const Parts& parts, const std::vector<int>& codes) {
    thread_local Workspace space;
    thread_local std::unique_ptr<Eye> eye;
    thread_local Grid eye_grid;
    if (!eye || eye_grid.window_ui != parts.grid.window_ui ||
        eye_grid.samples_per_ui != parts.grid.samples_per_ui) {
        eye = std::make_unique<Eye>(parts.grid);
        eye_grid = parts.grid;
    }
    const double noise_mv = solve_pulse(parts, codes, space);
    eye->fill(space.wave, {noise_mv, parts.sampler_jitter_ui}, parts.decision);
    return *eye;
}

void check_ratio(double error_ratio) {
    if (!(error_ratio > 0 && error_ratio <= 0.1))
        throw std::invalid_argument("an error ratio above 0 and at most 0.1 is needed");
}

}  // namespace

Oracle::Oracle(const TargetFile& target, int lane) {
    if (lane < 0 || static_cast<std::size_t>(lane) >= target.lanes.size())
        throw std::out_of_range("no such lane");
    std::vector<Cx> symbol = symbol_spectrum(target.grid, target.transmitter);
    const LaneChannel& channel = target.lanes[static_cast<std::size_t>(lane)];
    ChannelChains chains = channel.touchstone
                               ? file_chains(target.grid, *channel.touchstone, symbol)
                               : line_chains(target.grid, channel.line);
    parts_ = std::make_unique<const Parts>(target, lane, std::move(chains), std::move(symbol));
}

Oracle::~Oracle() = default;
Oracle::Oracle(Oracle&&) noexcept = default;
Oracle& Oracle::operator=(Oracle&&) noexcept = default;

Margins Oracle::margins(const std::vector<int>& codes, double error_ratio) const {
    check_ratio(error_ratio);
    return filled_eye(*parts_, codes).margins(error_ratio);
}

double Oracle::error_ratio_at(const std::vector<int>& codes, double phase_ui,
                              double offset_mv) const {
    return filled_eye(*parts_, codes).error_ratio_at(phase_ui, offset_mv);
}

double Oracle::screening_score(const std::vector<int>& codes, const Required& required) const {
    check_ratio(required.error_ratio);
    return filled_eye(*parts_, codes).screening_score(required);
}

std::vector<double> Oracle::pulse_mv(const std::vector<int>& codes) const {
    Workspace space;
    solve_pulse(*parts_, codes, space);
    return space.wave;
}

int Oracle::lane() const {
    return parts_->lane;
}

const LatchedMonitor& Oracle::monitor() const {
    return parts_->monitor;
}

const Decision& Oracle::decision() const {
    return parts_->decision;
}

std::vector<int> Oracle::code_counts() const {
    return parts_->code_counts;
}

std::size_t Oracle::combinations() const {
    return std::accumulate(
        parts_->code_counts.begin(), parts_->code_counts.end(), std::size_t{1},
        [](std::size_t product, int count) { return product * static_cast<std::size_t>(count); });
}

std::vector<int> Oracle::codes_at(std::size_t index) const {
    std::vector<int> codes(parts_->code_counts.size());
    for (std::size_t i = codes.size(); i-- > 0;) {
        const auto count = static_cast<std::size_t>(parts_->code_counts[i]);
        codes[i] = static_cast<int>(index % count);
        index /= count;
    }
    return codes;
}

double Oracle::nyquist_loss_db() const {
    return parts_->nyquist_loss_db;
}

const std::string& Oracle::channel_note() const {
    return parts_->note;
}

}  // namespace lanewright::sim
