#include "sim_target/physics/slice.hpp"

#include <algorithm>
#include <cmath>

#include "sim_target/physics/crossing.hpp"
#include "sim_target/physics/gaussian.hpp"

namespace lanewright::sim {

void Slice::take(const Pulse& pulse, std::span<const Aggressor> aggressors, double phase_ui) {
    const std::size_t window = pulse.grid().window_ui;
    taps_.resize(window);
    slopes_.resize(window);
    pulse.take(phase_ui, taps_, slopes_);
    others_.assign(taps_.begin() + 2, taps_.end() - 1);
    slope_others_ = 0;
    for (std::size_t k = 2; k + 1 < window; ++k) slope_others_ += slopes_[k] * slopes_[k];
    far_taps_.resize(window);
    far_slopes_.resize(window);
    for (const Aggressor& aggressor : aggressors) {
        aggressor.pulse->take(phase_ui + aggressor.phase_ui, far_taps_, far_slopes_);
        for (std::size_t k = 0; k < window; ++k) {
            others_.push_back(aggressor.size * far_taps_[k]);
            const double slope = aggressor.size * far_slopes_[k];
            slope_others_ += slope * slope;
        }
    }
}

void Slice::fill(const Pulse& pulse, std::span<const Aggressor> aggressors,
                 const Disturbance& disturbance, double phase_ui) {
    take(pulse, aggressors, phase_ui);
    disturbance_ = disturbance;
    isi_.fill(others_, disturbance.noise_mv, disturbance.late_mv);
    for (std::size_t i = 0; i < around_.size(); ++i) around_[i] = surroundings(i);
    std::sort(worst_first_.begin(), worst_first_.end(), [&](std::size_t a, std::size_t b) {
        return around_[a].centre_mv < around_[b].centre_mv;
    });
}

Slice::Surroundings Slice::surroundings(std::size_t index) const {
    const double before = (index & 1U) != 0 ? 1.0 : -1.0;
    const double after = (index & 2U) != 0 ? 1.0 : -1.0;
    const double slope = slopes_.front() + before * slopes_[1] + after * slopes_.back();
    return {taps_.front() + before * taps_[1] + after * taps_.back(),
            disturbance_.jitter_ui * std::sqrt(slope * slope + slope_others_)};
}

double Slice::lost_ones(double threshold_mv) const {
    double sum = 0;
    for (const std::size_t i : worst_first_)
        sum += isi_.below(disturbance_.stage, around_[i].centre_mv, threshold_mv,
                          around_[i].jitter_mv, sum);
    return sum / static_cast<double>(around_.size());
}

double Slice::level_of_ones(double share) const {
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
    low = disturbance_.stage.value(low + isi_.lowest()) -
          (std::abs(wanted) + 1.0) * (isi_.sigma() + jitter);
    high = disturbance_.stage.value(high);
    return crossing(spare, {low, spare(low)}, {high, spare(high)}, 1e-6 * isi_.sigma());
}

// A one is lost below the threshold, a zero above it; both see the same surroundings mirrored.
double Slice::error_ratio(double threshold_mv) const {
    return 0.5 * (lost_ones(threshold_mv) + lost_ones(-threshold_mv));
}

double Slice::both_wrong(double threshold_mv, const Slice& other, double other_threshold_mv) const {
    double product = 0, here = 0, there = 0;
    for (std::size_t k = 0; k < others_.size(); ++k) {
        product += others_[k] * other.others_[k];
        here += others_[k] * others_[k];
        there += other.others_[k] * other.others_[k];
    }
    const double follows = there > 0 ? product / there : 0.0;
    const double rest = std::sqrt(std::max(0.0, here - follows * product));
    const auto wrong = [](const Slice& slice, double in, double jitter, double threshold) {
        const Compression& stage = slice.disturbance_.stage;
        const double sigma = slice.isi_.sigma_after(stage.slope(in), jitter);
        return quick_gaussian_tail((stage.value(in) - threshold) / sigma);
    };
    const std::span<const double> support = other.isi_.support();
    const std::span<const double> weight = other.isi_.weights();
    double sum = 0;
    for (std::size_t i = 0; i < around_.size(); ++i) {
        const double more = std::hypot(around_[i].jitter_mv, rest);
        for (std::size_t v = 0; v < support.size(); ++v) {
            const double far = other.around_[i].centre_mv + support[v];
            const double near = around_[i].centre_mv + follows * support[v];
            const double far_jitter = other.around_[i].jitter_mv;
            for (const double sign : {1.0, -1.0})
                sum += weight[v] * wrong(other, far, far_jitter, sign * other_threshold_mv) *
                       wrong(*this, near, more, sign * threshold_mv);
        }
    }
    return sum / (2.0 * static_cast<double>(around_.size()));
}

// The worst of the four surroundings, the worst case of the large taps beyond them, and the small
// ones as noise.
double Slice::screening_level(const Pulse& pulse, std::span<const Aggressor> aggressors,
                              const Disturbance& disturbance, double phase_ui, double deviate) {
    take(pulse, aggressors, phase_ui);
    disturbance_ = disturbance;
    const double early = disturbance.noise_mv * disturbance.noise_mv;
    const double late = disturbance.late_mv * disturbance.late_mv;
    const double jitter = disturbance.jitter_ui * disturbance.jitter_ui;
    const double large = 1.5 * std::sqrt(early + late + jitter * slope_others_);
    double worst = 0, small = 0;
    for (const double tap : others_) {
        const double size = std::abs(tap);
        if (size > large)
            worst += size;
        else
            small += size * size;
    }
    double least = 1e300;
    for (std::size_t i = 0; i < around_.size(); ++i) {
        const Surroundings around = surroundings(i);
        const double in = around.centre_mv - worst;
        const double slope = disturbance.stage.slope(in);
        const double sigma =
            std::sqrt(slope * slope * (early + small + around.jitter_mv * around.jitter_mv) + late);
        least = std::min(least, disturbance.stage.value(in) - deviate * sigma);
    }
    return least;
}

}  // namespace lanewright::sim
