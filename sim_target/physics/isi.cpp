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

void NoisyIsi::fill(std::span<const double> other_taps, double noise_sigma) {
    large_.clear();
    double variance = noise_sigma * noise_sigma;
    for (const double tap : other_taps) {
        if (std::abs(tap) > small_tap_share * noise_sigma)
            large_.push_back(std::abs(tap));
        else
            variance += tap * tap;
    }
    std::sort(large_.begin(), large_.end());
    sigma_ = std::sqrt(variance);
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
    sigma_ = std::sqrt(std::max(0.25 * sigma_ * sigma_, sigma_ * sigma_ - added_variance));
}

void NoisyIsi::finish() {
    sum_before_.resize(value_.size() + 1);
    sum_before_[0] = 0;
    for (std::size_t i = 0; i < value_.size(); ++i)
        sum_before_[i + 1] = sum_before_[i] + weight_[i];
}

double NoisyIsi::below(double level, double more_sigma) const {
    const double sigma = std::sqrt(sigma_ * sigma_ + more_sigma * more_sigma);
    const double scale = 1.0 / sigma;
    // Values more than eight sigma below the level are wholly below it.
    const auto certain =
        std::lower_bound(value_.begin(), value_.end(), level - 8.0 * sigma) - value_.begin();
    double sum = sum_before_[static_cast<std::size_t>(certain)];
    for (std::size_t i = static_cast<std::size_t>(certain); i < value_.size(); ++i) {
        const double tail = quick_gaussian_tail((value_[i] - level) * scale);
        // All the rest together weighs at most what is left of 1.
        if (tail < 1e-10 * sum) break;
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
