#include "sim_target/physics/isi.hpp"

#include <algorithm>
#include <cmath>

#include "sim_target/physics/crossing.hpp"
#include "sim_target/physics/gaussian.hpp"

namespace lanewright::sim {

namespace {

constexpr double small_tap_share = 0.1;        // of sigma
constexpr double grid_share = 0.25;            // of sigma
constexpr std::size_t most_half_steps = 6000;  // of the grid; a coarser one is taken beyond

}  // namespace

double peak_distortion(std::span<const double> other_taps) {
    double sum = 0;
    for (const double tap : other_taps) sum += std::abs(tap);
    return sum;
}

void NoisyIsi::fill(std::span<const double> other_taps, double early_sigma, double late_sigma) {
    large_.clear();
    early_variance_ = early_sigma * early_sigma;
    late_variance_ = late_sigma * late_sigma;
    const double small = small_tap_share * std::sqrt(early_variance_ + late_variance_);
    for (const double tap : other_taps) {
        if (std::abs(tap) > small)
            large_.push_back(std::abs(tap));
        else
            early_variance_ += tap * tap;
    }
    std::sort(large_.begin(), large_.end());
    sigma_ = std::sqrt(early_variance_ + late_variance_);
    if (large_.size() <= exact_taps)
        enumerate();
    else
        convolve();
    finish();
}

void NoisyIsi::enumerate() {
    value_.assign(1, 0.0);
    for (const double tap : large_) {
        const std::size_t size = value_.size();
        for (std::size_t i = 0; i < size; ++i) {
            value_.push_back(value_[i] + tap);
            value_[i] -= tap;
        }
    }
    std::sort(value_.begin(), value_.end());
    weight_.assign(value_.size(), 1.0 / static_cast<double>(value_.size()));
}

void NoisyIsi::convolve() {
    double reach = 0;
    for (const double tap : large_) reach += tap;
    const double step = std::max(grid_share * sigma_, reach / most_half_steps);
    // Half widths of the support; each tap widens it by its whole steps and one.
    std::size_t widest = 0;
    for (const double tap : large_) widest += static_cast<std::size_t>(tap / step) + 1;
    const std::size_t longest = static_cast<std::size_t>(large_.back() / step) + 1;
    const std::size_t centre = widest + longest;
    work_.assign(2 * centre + 1, 0.0);
    next_.assign(2 * centre + 1, 0.0);
    work_[centre] = 1.0;

    std::size_t half = 0;
    double added_variance = 0;
    for (const double tap : large_) {
        const auto whole = static_cast<std::size_t>(tap / step);
        const double part = tap / step - static_cast<double>(whole);
        added_variance += part * (1.0 - part) * step * step;
        half += whole + 1;
        const double near = 0.5 * (1.0 - part), far = 0.5 * part;
        const std::size_t count = 2 * half + 1;
        const double* from = work_.data() + (centre - half);
        double* to = next_.data() + (centre - half);
        const double* left = from - whole;
        const double* right = from + whole;
        for (std::size_t i = 0; i < count; ++i)
            to[i] = near * (left[i] + right[i]) + far * (left[i - 1] + right[i + 1]);
        work_.swap(next_);
    }
    value_.clear();
    weight_.clear();
    for (std::size_t i = centre - half; i <= centre + half; ++i) {
        if (work_[i] <= 0) continue;
        value_.push_back((static_cast<double>(i) - static_cast<double>(centre)) * step);
        weight_.push_back(work_[i]);
    }
    const double variance = sigma_ * sigma_;
    const double left = std::max(0.25 * variance, variance - added_variance);
    early_variance_ += left - variance;
    sigma_ = std::sqrt(left);
}

double NoisyIsi::sigma_after(double slope, double more_sigma) const {
    const double early = early_variance_ + more_sigma * more_sigma;
    const double all = slope * slope * early + late_variance_;
    // The grid's own variance may be more than the early noise: what is left after a stage is
    // never less than a part of what would be there without it.
    return std::sqrt(std::max(all, 0.25 * slope * slope * sigma_ * sigma_));
}

void NoisyIsi::finish() {
    sum_before_.resize(value_.size() + 1);
    sum_before_[0] = 0;
    for (std::size_t i = 0; i < value_.size(); ++i)
        sum_before_[i + 1] = sum_before_[i] + weight_[i];
}

double NoisyIsi::below(double level, double more_sigma, double known) const {
    const double sigma = sigma_after(1.0, more_sigma);
    const double scale = 1.0 / sigma;
    // Values more than eight sigma below the level are wholly below it.
    const auto certain =
        std::lower_bound(value_.begin(), value_.end(), level - 8.0 * sigma) - value_.begin();
    double sum = sum_before_[static_cast<std::size_t>(certain)];
    for (std::size_t i = static_cast<std::size_t>(certain); i < value_.size(); ++i) {
        const double tail = quick_gaussian_tail((value_[i] - level) * scale);
        // All the rest together weighs at most what is left of 1.
        if (tail < 1e-10 * (sum + known)) break;
        sum += weight_[i] * tail;
    }
    return sum;
}

double NoisyIsi::below(const Compression& stage, double centre, double threshold, double more_sigma,
                       double known) const {
    if (stage.none()) return below(threshold - centre, more_sigma, known);
    // No sigma after the stage is larger than that before it.
    const double most = sigma_after(1.0, more_sigma);
    const double surely = stage.inverse(threshold - 8.0 * most) - centre;
    const auto certain = static_cast<std::size_t>(
        std::lower_bound(value_.begin(), value_.end(), surely) - value_.begin());
    const double early = early_variance_ + more_sigma * more_sigma;
    const double least = 0.25 * sigma_ * sigma_;
    const double inverse_knee = 1.0 / stage.knee_mv;
    double sum = sum_before_[certain];
    for (std::size_t i = certain; i < value_.size(); ++i) {
        // Compression's value and slope and sigma_after(), with what does not change taken out.
        const double in = centre + value_[i];
        const double share = in * inverse_knee;
        const double gain2 = 1.0 / (1.0 + share * share);
        const double slope2 = gain2 * gain2 * gain2;
        const double variance = std::max(slope2 * early + late_variance_, slope2 * least);
        const double out = in * std::sqrt(gain2) - threshold;
        const double tail = quick_gaussian_tail(out / std::sqrt(variance));
        // All the rest together weighs at most what is left of 1.
        if (tail < 1e-8 * (sum + known)) break;
        sum += weight_[i] * tail;
    }
    return sum;
}

double NoisyIsi::level_at(double probability) const {
    // The curve is nearly straight on the normal deviate's scale.
    const double wanted = gaussian_tail_inverse(probability);
    const auto deviate = [&](double level) {
        const double ratio = std::clamp(below(level), 1e-300, 0.9999);
        return wanted - gaussian_tail_inverse(ratio);
    };
    const double low = value_.front() - (std::abs(wanted) + 1.0) * sigma_;
    // The distribution is symmetric about zero, so half of it lies below zero.
    return crossing(deviate, {low, deviate(low)}, {0.0, wanted}, 1e-7 * sigma_);
}

}  // namespace lanewright::sim
