#include "sim_target/physics/eye.hpp"

#include <algorithm>
#include <array>
#include <cmath>

#include "sim_target/physics/crossing.hpp"
#include "sim_target/physics/gaussian.hpp"

namespace lanewright::sim {

namespace {

// Lagrange's polynomial through four neighbouring samples, for a point between the middle two.
std::array<double, 4> cubic_weights(double part) {
    const double a = part + 1.0, b = part, c = part - 1.0, d = part - 2.0;
    return {-b * c * d / 6.0, a * c * d / 2.0, -a * b * d / 2.0, a * b * c / 6.0};
}

// The same polynomial's slope per sample.
std::array<double, 4> slope_weights(double part) {
    const double a = part + 1.0, b = part, c = part - 1.0, d = part - 2.0;
    return {-(b * c + b * d + c * d) / 6.0, (a * c + a * d + c * d) / 2.0,
            -(a * b + a * d + b * d) / 2.0, (a * b + a * c + b * c) / 6.0};
}

struct Position {
    std::size_t sample;  // the one before the two around the point
    double part;         // of the way from the first of the two to the second
    std::array<double, 4> weight;
};

Position position_of(double phase_ui, const Grid& grid) {
    const double samples = phase_ui * static_cast<double>(grid.samples_per_ui);
    const double whole = std::floor(samples);
    const auto length = static_cast<long long>(grid.samples());
    long long first = (static_cast<long long>(whole) - 1) % length;
    if (first < 0) first += length;
    const double part = samples - whole;
    return {static_cast<std::size_t>(first), part, cubic_weights(part)};
}

}  // namespace

double score(const Margins& margins, const Required& required) {
    return std::min(2.0 * std::min(margins.up_mv, margins.down_mv) / required.height_mv,
                    2.0 * std::min(margins.left_ui, margins.right_ui) / required.width_ui);
}

void Eye::fill(std::span<const double> pulse_mv, const Disturbance& disturbance,
               const Decision& decision) {
    pulse_.assign(pulse_mv.begin(), pulse_mv.end());
    disturbance_ = disturbance;
    decision_ = decision;
    recovered_ui_ = find_phase();
}

double Eye::pulse_at(double phase_ui) const {
    const Position at = position_of(phase_ui, grid_);
    const std::size_t mask = grid_.samples() - 1;
    double sum = 0;
    for (std::size_t i = 0; i < 4; ++i) sum += at.weight[i] * pulse_[(at.sample + i) & mask];
    return sum;
}

// Half a unit interval to either side of the peak the difference of neighbours has opposite signs,
// so there is at least one crossing between.
double Eye::find_phase() const {
    const auto peak = std::max_element(pulse_.begin(), pulse_.end()) - pulse_.begin();
    const auto per_ui = static_cast<double>(grid_.samples_per_ui);
    const double peak_ui = static_cast<double>(peak) / per_ui;
    const auto fall = [&](double phase) { return pulse_at(phase + 0.5) - pulse_at(phase - 0.5); };

    double best_ui = peak_ui, best_cursor = -1e300;
    CurvePoint before{peak_ui - 0.5, fall(peak_ui - 0.5)};
    for (std::size_t i = 1; i <= grid_.samples_per_ui; ++i) {
        const double phase = peak_ui - 0.5 + static_cast<double>(i) / per_ui;
        const CurvePoint here{phase, fall(phase)};
        if (before.y > 0 && here.y <= 0) {
            const double root = here.y == 0 ? here.x : crossing(fall, before, here, 1e-9);
            const double cursor = pulse_at(root);
            if (cursor > best_cursor) {
                best_cursor = cursor;
                best_ui = root;
            }
        }
        before = here;
    }
    return best_ui;
}

// Tap k is what the symbol k unit intervals earlier adds now; the last one is that of the next
// symbol, the window being circular.
void Eye::take_taps(double phase_ui) {
    const Position at = position_of(phase_ui, grid_);
    const std::array<double, 4> slope = slope_weights(at.part);
    const std::size_t mask = grid_.samples() - 1;
    const auto per_ui = static_cast<double>(grid_.samples_per_ui);
    slope_others_ = 0;
    for (std::size_t k = 0; k < grid_.window_ui; ++k) {
        const std::size_t start = at.sample + k * grid_.samples_per_ui;
        double sum = 0, rise = 0;
        for (std::size_t i = 0; i < 4; ++i) {
            const double sample = pulse_[(start + i) & mask];
            sum += at.weight[i] * sample;
            rise += slope[i] * sample;
        }
        taps_[k] = sum;
        rise *= per_ui;
        if (k == 0)
            slope_now_ = rise;
        else if (k == 1)
            slope_before_ = rise;
        else if (k + 1 == grid_.window_ui)
            slope_after_ = rise;
        else
            slope_others_ += rise * rise;
    }
}

void Eye::settle_at(double phase_ui) {
    take_taps(phase_ui);
    // All but the cursor and its two neighbours.
    isi_.fill(std::span<const double>(taps_).subspan(2, taps_.size() - 3), disturbance_.noise_mv);
    for (std::size_t i = 0; i < around_.size(); ++i) around_[i] = surroundings(i);
}

Eye::Surroundings Eye::surroundings(std::size_t index) const {
    const double before = (index & 1U) != 0 ? 1.0 : -1.0;
    const double after = (index & 2U) != 0 ? 1.0 : -1.0;
    const double slope = slope_now_ + before * slope_before_ + after * slope_after_;
    return {taps_.front() + before * taps_[1] + after * taps_.back(),
            disturbance_.jitter_ui * std::sqrt(slope * slope + slope_others_)};
}

double Eye::lost_ones(double threshold_mv) const {
    double sum = 0;
    for (const Surroundings& around : around_)
        sum += isi_.below(threshold_mv - around.centre_mv, around.jitter_mv);
    return sum / static_cast<double>(around_.size());
}

double Eye::level_of_ones(double share) const {
    const double wanted = gaussian_tail_inverse(share);
    const auto spare = [&](double level) {
        return wanted - gaussian_tail_inverse(std::clamp(lost_ones(level), 1e-300, 0.9999));
    };
    double low = around_[0].centre_mv, high = low, jitter = 0;
    for (const Surroundings& around : around_) {
        low = std::min(low, around.centre_mv);
        high = std::max(high, around.centre_mv);
        jitter = std::max(jitter, around.jitter_mv);
    }
    // At the highest centre at least half the ones are below; far under the lowest next to none.
    low += isi_.lowest() - (std::abs(wanted) + 1.0) * (isi_.sigma() + jitter);
    return crossing(spare, {low, spare(low)}, {high, spare(high)}, 1e-7 * isi_.sigma());
}

// A one is lost below the threshold, a zero above it; both see the same surroundings mirrored.
double Eye::ratio(double threshold_mv) const {
    return 0.5 * (lost_ones(threshold_mv) + lost_ones(-threshold_mv));
}

double Eye::error_ratio_at(double phase_ui, double offset_mv) {
    settle_at(recovered_ui_ + decision_.phase_ui + phase_ui);
    return ratio(decision_.offset_mv + offset_mv);
}

// Outwards from the decision point to the median crossing, where at least every fourth bit is
// wrong: a bit that differs from its neighbour is there as often wrong as right.
double Eye::edge_time_ui(double wanted, double at_centre, double side) {
    const double start = recovered_ui_ + decision_.phase_ui;
    const double end = recovered_ui_ + side * 0.5;
    const auto spare = [&](double phase) {
        settle_at(phase);
        return gaussian_tail_inverse(std::clamp(ratio(decision_.offset_mv), 1e-300, 0.75)) - wanted;
    };
    const double quarter_errors = 0.6744897501960817;  // normal deviate of 1/4
    const double edge = crossing(spare, {start, at_centre - wanted},
                                 {end, std::min(-0.1, quarter_errors - wanted)}, 2e-5);
    return std::abs(edge - start);
}

// At the level where the ones alone use up the error ratio the zeros add theirs: the edge lies at
// or inside it.
void Eye::open_heights(double error_ratio, Margins& margins) const {
    const double level = level_of_ones(2.0 * error_ratio);
    const auto distance = [&](double threshold, double direction) {
        const double reach = level - direction * threshold;
        const double wanted = gaussian_tail_inverse(error_ratio);
        const auto spare = [&](double away) {
            const double there = ratio(threshold + direction * away);
            return gaussian_tail_inverse(std::clamp(there, 1e-300, 0.75)) - wanted;
        };
        const double at_reach = spare(reach);
        if (at_reach > -1e-6) return reach;
        return crossing(spare, {0.0, spare(0.0)}, {reach, at_reach}, 1e-6 * isi_.sigma());
    };
    margins.up_mv = distance(decision_.offset_mv, 1.0);
    margins.down_mv = distance(decision_.offset_mv, -1.0);
}

Margins Eye::margins(double error_ratio) {
    Margins margins;
    settle_at(recovered_ui_ + decision_.phase_ui);
    margins.locked = taps_.front() > 0;
    margins.noise_mv = disturbance_.noise_mv;
    margins.centre_error_ratio = ratio(decision_.offset_mv);
    margins.closed = !(margins.centre_error_ratio < error_ratio);
    const double wanted = gaussian_tail_inverse(error_ratio);
    const double at_centre =
        gaussian_tail_inverse(std::clamp(margins.centre_error_ratio, 1e-300, 0.75));
    if (margins.closed) {
        const double level = level_of_ones(error_ratio);
        margins.up_mv = level - decision_.offset_mv;
        margins.down_mv = level + decision_.offset_mv;
        margins.left_ui = margins.right_ui = -0.5 * (wanted - at_centre) / wanted;
        return margins;
    }
    open_heights(error_ratio, margins);
    margins.left_ui = edge_time_ui(wanted, at_centre, -1.0);
    margins.right_ui = edge_time_ui(wanted, at_centre, 1.0);
    return margins;
}

// The worst of the four surroundings, the worst case of the large taps beyond them, and the small
// ones as noise.
double Eye::screening_level(double phase_ui, double deviate) {
    take_taps(phase_ui);
    const double noise = disturbance_.noise_mv * disturbance_.noise_mv;
    const double jitter = disturbance_.jitter_ui * disturbance_.jitter_ui;
    const double large = 1.5 * std::sqrt(noise + jitter * slope_others_);
    double worst = 0, small = 0;
    for (std::size_t k = 2; k + 1 < taps_.size(); ++k) {
        const double tap = std::abs(taps_[k]);
        if (tap > large)
            worst += tap;
        else
            small += tap * tap;
    }
    double least = 1e300;
    for (std::size_t i = 0; i < around_.size(); ++i) {
        const Surroundings around = surroundings(i);
        const double sigma = std::sqrt(noise + small + around.jitter_mv * around.jitter_mv);
        least = std::min(least, around.centre_mv - deviate * sigma);
    }
    return least - worst - std::abs(decision_.offset_mv);
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
