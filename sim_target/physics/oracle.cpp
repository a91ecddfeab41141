#include "sim_target/physics/truth.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <numeric>
#include <stdexcept>

#include "sim_target/physics/fourier.hpp"
#include "sim_target/physics/keyed_random.hpp"
#include "sim_target/physics/link.hpp"

namespace lanewright::sim {

namespace {

Decision decision_of(const TargetFile& target, int lane) {
    const auto lane_word = static_cast<std::uint64_t>(lane);
    KeyedRandom offset(target.seed, Purpose::decision_offset, {lane_word});
    KeyedRandom phase(target.seed, Purpose::phase_offset, {lane_word});
    Decision decision;
    decision.offset_mv = target.spread.offset_sigma_mv * offset.normal();
    decision.phase_ui = std::clamp(target.spread.phase_sigma_ui * phase.normal(), -0.2, 0.2);
    return decision;
}

// Element errors are drawn for what the file says, before process and temperature scale it: an
// element's error does not depend on how warm it is.
Network network_of(const TargetFile& target, int lane, std::span<const Chain> source) {
    std::array<std::vector<double>, bank_count> factors;
    for (std::size_t bank = 0; bank < bank_count; ++bank)
        factors[bank] =
            element_factors(target.receiver.banks[bank], target.seed, lane, static_cast<int>(bank));
    return Network(target.grid, source, receiver_at(target), target.noise, factors);
}

// The lane's aggressors of one kind, each with its size and its phase.
std::vector<Aggressor> aggressors_of(const TargetFile& target, int lane, bool far_end) {
    std::vector<Aggressor> aggressors;
    const auto& sources = target.lanes[static_cast<std::size_t>(lane)].crosstalk;
    for (std::size_t i = 0; i < sources.size(); ++i) {
        if (sources[i].far_end != far_end) continue;
        KeyedRandom random(target.seed, Purpose::crosstalk_phase,
                           {static_cast<std::uint64_t>(lane), i});
        const double drawn_ui = random.uniform();
        aggressors.push_back({nullptr, std::pow(10.0, sources[i].coupling_db / 20.0),
                              sources[i].phase_ui < 0 ? drawn_ui : sources[i].phase_ui});
    }
    return aggressors;
}

}  // namespace

struct Oracle::Parts {
    Parts(const TargetFile& target, int lane_number, std::vector<Cx> symbol_in)
        : Parts(target, lane_number, link_of(target, lane_number, symbol_in), symbol_in) {}

    Parts(const TargetFile& target, int lane_number, LaneLink link, std::vector<Cx> symbol_in)
        : grid(target.grid),
          symbol(std::move(symbol_in)),
          coupled(coupling(target.grid, symbol)),
          network(network_of(target, lane_number, link.source)),
          fourier(target.grid.samples()),
          decision(decision_of(target, lane_number)),
          far_aggressors(aggressors_of(target, lane_number, true)),
          near_aggressors(aggressors_of(target, lane_number, false)),
          near_s(1.0 / target.receiver.termination_ohm),
          lane(lane_number),
          nyquist_loss_db(link.nyquist_loss_db),
          note(std::move(link.note)) {
        for (const BankSpec& bank : target.receiver.banks) code_counts.push_back(bank.codes());
        disturbance.late_mv = target.sampler_noise_mv;
        disturbance.jitter_ui = target.sampler_jitter_ui;
        disturbance.stage.knee_mv = target.lanes[static_cast<std::size_t>(lane_number)].knee_mv;
    }

    Grid grid;
    std::vector<Cx> symbol, coupled;
    Network network;
    RealInverseFourier fourier;
    Disturbance disturbance;  // noise_mv depends on the codes
    Decision decision;
    std::vector<Aggressor> far_aggressors, near_aggressors;
    double near_s;  // a near aggressor's wave of a volt is this current beside the channel
    int lane;
    double nyquist_loss_db;
    std::string note;
    std::vector<int> code_counts;
};

namespace {

struct Workspace {
    Solution solution;
    std::vector<Cx> spectrum, work;
    std::vector<double> wave, far_wave, near_wave;
};

// `response`: volts at the equalizer's output for each frequency of `symbol`.
template <class Parts>
void transform(const Parts& parts, std::span<const Cx> response, std::span<const Cx> symbol,
               double scale, Workspace& space, std::vector<double>& wave) {
    space.spectrum.resize(symbol.size());
    for (std::size_t k = 0; k < symbol.size(); ++k)
        space.spectrum[k] = (1e3 * scale) * (response[k] * symbol[k]);
    wave.resize(parts.grid.samples());
    parts.fourier.run(space.spectrum, space.work, wave);
}

template <class Parts>
void solve_pulse(const Parts& parts, const std::vector<int>& codes, Workspace& space) {
    if (!parts.network.has_codes(codes)) throw std::out_of_range("codes outside their banks");
    parts.network.solve(codes, space.solution);
    transform(parts, space.solution.transfer, parts.symbol, 1.0, space, space.wave);
}

template <class Parts>
void fill_eye(const Parts& parts, const std::vector<int>& codes, Workspace& space, Eye& eye) {
    solve_pulse(parts, codes, space);
    Disturbance disturbance = parts.disturbance;
    disturbance.noise_mv = std::sqrt(space.solution.noise_v2) * 1e3;
    std::array<Eye::Crosstalk, Eye::most_crosstalk> crosstalk;
    std::size_t kinds = 0;
    if (!parts.far_aggressors.empty()) {
        transform(parts, space.solution.transfer, parts.coupled, 1.0, space, space.far_wave);
        crosstalk[kinds++] = {space.far_wave, parts.far_aggressors};
    }
    if (!parts.near_aggressors.empty()) {
        transform(parts, space.solution.from_input, parts.coupled, parts.near_s, space,
                  space.near_wave);
        crosstalk[kinds++] = {space.near_wave, parts.near_aggressors};
    }
    eye.fill(space.wave, disturbance, parts.decision, {crosstalk.data(), kinds});
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
    fill_eye(parts, codes, space, *eye);
    return *eye;
}

void check_ratio(double error_ratio) {
    if (!(error_ratio > 0 && error_ratio <= 0.1))
        throw std::invalid_argument("an error ratio above 0 and at most 0.1 is needed");
}

// Slices by phase are the eye's own cache; the spread is worked out once.
class EyeOfCodes final : public EyeProbe {
  public:
    EyeOfCodes(std::unique_ptr<Eye> eye, const Decision& decision)
        : eye_(std::move(eye)), decision_(decision), spread_ui_(eye_->crossing_spread_ui()) {}

    double error_ratio(double phase_ui, double offset_mv, const Moment& moment) override {
        return eye_->slice_at(phase_ui + moment.phase_ui)
            .error_ratio(threshold_mv(offset_mv, moment));
    }

    Margins margins(double error_ratio, const Moment& moment) override {
        check_ratio(error_ratio);
        const Decision moved{threshold_mv(0, moment) - decision_.offset_mv, moment.phase_ui};
        Margins margins = eye_->margins(error_ratio, moved);
        margins.up_mv *= moment.gain;
        margins.down_mv *= moment.gain;
        margins.noise_mv *= moment.gain;
        return margins;
    }

    double disagreement(double phase_ui, double offset_mv, const Moment& moment) override {
        const double here_mv = threshold_mv(offset_mv, moment);
        const double data_mv = threshold_mv(0, moment);
        // Both lie in the cache of the eye: asking for the second does not touch the first.
        const Slice& here = eye_->slice_at(phase_ui + moment.phase_ui);
        const Slice& data = eye_->slice_at(moment.phase_ui);
        const double wrong_here = here.error_ratio(here_mv);
        const double wrong_data = data.error_ratio(data_mv);
        const double both =
            std::min({here.both_wrong(here_mv, data, data_mv), wrong_here, wrong_data});
        return std::clamp(wrong_here + wrong_data - 2.0 * both, 0.0, 1.0);
    }

    double crossing_spread_ui() const override { return spread_ui_; }

  private:
    // The threshold at which the eye without the moment's gain would decide alike.
    double threshold_mv(double offset_mv, const Moment& moment) const {
        return (decision_.offset_mv + offset_mv + moment.offset_mv) / moment.gain;
    }

    std::unique_ptr<Eye> eye_;
    Decision decision_;
    double spread_ui_;
};

}  // namespace

Oracle::Oracle(const TargetFile& target, int lane) {
    if (lane < 0 || static_cast<std::size_t>(lane) >= target.lanes.size())
        throw std::out_of_range("no such lane");
    parts_ = std::make_unique<const Parts>(target, lane, symbol_spectrum(target, lane));
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

std::vector<double> Oracle::contour_mv(const std::vector<int>& codes, double error_ratio,
                                       std::size_t phases) const {
    check_ratio(error_ratio);
    if (phases < 2) throw std::invalid_argument("a contour has two phases or more");
    return filled_eye(*parts_, codes).contour_mv(error_ratio, phases);
}

std::unique_ptr<EyeProbe> Oracle::probe(const std::vector<int>& codes) const {
    auto eye = std::make_unique<Eye>(parts_->grid);
    Workspace space;
    fill_eye(*parts_, codes, space, *eye);
    return std::make_unique<EyeOfCodes>(std::move(eye), parts_->decision);
}

int Oracle::lane() const {
    return parts_->lane;
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
