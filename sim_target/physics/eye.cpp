#include "sim_target/physics/eye.hpp"

#include <algorithm>
#include <cmath>
#include <stdexcept>

#include "sim_target/physics/crossing.hpp"
#include "sim_target/physics/gaussian.hpp"

namespace lanewright::sim {

namespace {

constexpr double crossing_share = 1e-3;  // of the transitions, on either side

// Normal deviate of a ratio, finite for all that come.
double deviate_of(double ratio) {
    return gaussian_tail_inverse(std::clamp(ratio, 1e-300, 0.75));
}

// At the level where the ones alone use up the error ratio the zeros add theirs: the edge lies at
// or inside it.
double height_of(const Slice& slice, double error_ratio, double level, double threshold,
                 double direction) {
    const double reach = level - direction * threshold;
    const double wanted = gaussian_tail_inverse(error_ratio);
    const auto spare = [&](double away) {
        return deviate_of(slice.error_ratio(threshold + direction * away)) - wanted;
    };
    const double at_reach = spare(reach);
    if (at_reach > -1e-6) return reach;
    return crossing(spare, {0.0, spare(0.0)}, {reach, at_reach}, 1e-6 * slice.sigma_mv());
}

}  // namespace

double score(const Margins& margins, const Required& required) {
    return std::min(2.0 * std::min(margins.up_mv, margins.down_mv) / required.height_mv,
                    2.0 * std::min(margins.left_ui, margins.right_ui) / required.width_ui);
}

Eye::Eye(const Grid& grid) : grid_(grid), pulse_(grid), crosstalk_(most_crosstalk, Pulse(grid)) {}

void Eye::fill(std::span<const double> pulse_mv, const Disturbance& disturbance,
               const Decision& decision, std::span<const Crosstalk> crosstalk) {
    if (crosstalk.size() > most_crosstalk) throw std::invalid_argument("too many kinds");
    pulse_.assign(pulse_mv);
    aggressors_.clear();
    for (std::size_t kind = 0; kind < crosstalk.size(); ++kind) {
        crosstalk_[kind].assign(crosstalk[kind].pulse_mv);
        for (Aggressor aggressor : crosstalk[kind].aggressors) {
            aggressor.pulse = &crosstalk_[kind];
            aggressors_.push_back(aggressor);
        }
    }
    disturbance_ = disturbance;
    decision_ = decision;
    recovered_ui_ = pulse_.recovered_phase_ui();
    for (Kept& kept : kept_) kept.used = 0;
}

const Slice& Eye::slice_at(double phase_ui) {
    return slice_at_absolute(recovered_ui_ + decision_.phase_ui + phase_ui);
}

const Slice& Eye::slice_at_absolute(double phase_ui) {
    Kept* oldest = &kept_.front();
    for (Kept& kept : kept_) {
        if (kept.used != 0 && kept.phase_ui == phase_ui) {
            kept.used = ++clock_;
            return kept.slice;
        }
        if (kept.used < oldest->used) oldest = &kept;
    }
    oldest->slice.fill(pulse_, aggressors_, disturbance_, phase_ui);
    oldest->phase_ui = phase_ui;
    oldest->used = ++clock_;
    return oldest->slice;
}

double Eye::error_ratio_at(double phase_ui, double offset_mv) {
    return slice_at(phase_ui).error_ratio(decision_.offset_mv + offset_mv);
}

// Outwards from the decision point to the median crossing, where at least every fourth bit is
// wrong: a bit that differs from its neighbour is there as often wrong as right.
double Eye::edge_time_ui(const Start& start, double wanted, double at_centre, double side) {
    const double end = recovered_ui_ + side * 0.5;
    const auto spare = [&](double phase) {
        work_.fill(pulse_, aggressors_, disturbance_, phase);
        return deviate_of(work_.error_ratio(start.offset_mv)) - wanted;
    };
    const double quarter_errors = 0.6744897501960817;  // normal deviate of 1/4
    const double edge = crossing(spare, {start.phase_ui, at_centre - wanted},
                                 {end, std::min(-0.1, quarter_errors - wanted)}, 2e-5);
    return side * (edge - start.phase_ui);
}

Margins Eye::margins(double error_ratio, const Decision& moved) {
    const Start start{recovered_ui_ + decision_.phase_ui + moved.phase_ui,
                      decision_.offset_mv + moved.offset_mv};
    const Slice& slice = slice_at_absolute(start.phase_ui);
    Margins margins;
    margins.locked = slice.cursor_mv() > 0;
    margins.noise_mv = std::hypot(disturbance_.noise_mv, disturbance_.late_mv);
    margins.centre_error_ratio = slice.error_ratio(start.offset_mv);
    margins.closed = !(margins.centre_error_ratio < error_ratio);
    const double wanted = gaussian_tail_inverse(error_ratio);
    const double at_centre = deviate_of(margins.centre_error_ratio);
    if (margins.closed) {
        const double level = slice.level_of_ones(error_ratio);
        margins.up_mv = level - start.offset_mv;
        margins.down_mv = level + start.offset_mv;
        margins.left_ui = margins.right_ui = -0.5 * (wanted - at_centre) / wanted;
        return margins;
    }
    const double level = slice.level_of_ones(2.0 * error_ratio);
    margins.up_mv = height_of(slice, error_ratio, level, start.offset_mv, 1.0);
    margins.down_mv = height_of(slice, error_ratio, level, start.offset_mv, -1.0);
    margins.left_ui = edge_time_ui(start, wanted, at_centre, -1.0);
    margins.right_ui = edge_time_ui(start, wanted, at_centre, 1.0);
    return margins;
}

std::vector<double> Eye::contour_mv(double error_ratio, std::size_t phases) {
    std::vector<double> levels;
    for (std::size_t i = 0; i < phases; ++i) {
        const double share = static_cast<double>(i) / static_cast<double>(phases - 1);
        work_.fill(pulse_, aggressors_, disturbance_, recovered_ui_ - 0.5 + share);
        const bool closed = !(work_.error_ratio(0.0) < error_ratio);
        const double level = work_.level_of_ones((closed ? 1.0 : 2.0) * error_ratio);
        levels.push_back(closed ? level : height_of(work_, error_ratio, level, 0.0, 1.0));
    }
    return levels;
}

// Before the median crossing the waveform of a rising transition is above zero, after it below
// zero, as often as interference and noise are beyond its median there.
double Eye::crossing_reach_ui(double side) {
    std::vector<double> taps(grid_.window_ui), slopes(grid_.window_ui), others;
    const double middle = recovered_ui_ - 0.5;
    const double wanted = gaussian_tail_inverse(crossing_share);
    const auto spare = [&](double phase) {
        pulse_.take(phase, taps, slopes);
        others.assign(taps.begin() + 2, taps.end());
        for (const Aggressor& aggressor : aggressors_) {
            aggressor.pulse->take(phase + aggressor.phase_ui, taps, slopes);
            for (const double tap : taps) others.push_back(aggressor.size * tap);
        }
        pulse_.take(phase, taps, slopes);
        crossing_.fill(others, disturbance_.noise_mv, disturbance_.late_mv);
        return deviate_of(crossing_.below(-side * (taps[0] - taps[1]))) - wanted;
    };
    const double at_end = spare(middle + side * 0.5);
    if (at_end <= 0) return 0.5;
    return side *
           (crossing(spare, {middle, -wanted}, {middle + side * 0.5, at_end}, 1e-4) - middle);
}

double Eye::crossing_spread_ui() {
    return crossing_reach_ui(-1.0) + crossing_reach_ui(1.0);
}

double Eye::screening_level(double phase_ui, double deviate) {
    return work_.screening_level(pulse_, aggressors_, disturbance_, phase_ui, deviate) -
           std::abs(decision_.offset_mv);
}

double Eye::screening_score(const Required& required) {
    const double deviate = gaussian_tail_inverse(required.error_ratio);
    const double start = recovered_ui_ + decision_.phase_ui;
    const double level = screening_level(start, deviate);
    const double height = 2.0 * level / required.height_mv;
    if (level <= 0) return height;
    constexpr double step_ui = 1.0 / 16.0;
    double narrower = 0.5;
    for (const double side : {-1.0, 1.0}) {
        double before = level, reach = 0;
        while (reach < 0.5) {
            const double here = screening_level(start + side * (reach + step_ui), deviate);
            if (here <= 0) {
                reach += step_ui * before / (before - here);
                break;
            }
            before = here;
            reach += step_ui;
        }
        narrower = std::min(narrower, reach);
    }
    return std::min(height, 2.0 * narrower / required.width_ui);
}

}  // namespace lanewright::sim
