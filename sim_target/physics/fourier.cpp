#include "sim_target/physics/fourier.hpp"

#include <cmath>
#include <numbers>
#include <stdexcept>

namespace lanewright::sim {

namespace {

std::vector<Cx> unit_roots(std::size_t count, std::size_t order) {
    std::vector<Cx> roots(count);
    for (std::size_t k = 0; k < count; ++k) {
        const double angle =
            2.0 * std::numbers::pi * static_cast<double>(k) / static_cast<double>(order);
        roots[k] = {std::cos(angle), std::sin(angle)};
    }
    return roots;
}

}  // namespace

RealInverseFourier::RealInverseFourier(std::size_t length) : half_(length / 2) {
    if (length < 8 || (length & (length - 1)) != 0)
        throw std::invalid_argument("the length of a transform must be a power of two from 8");
    turn_ = unit_roots(half_ / 2, half_);
    unpack_ = unit_roots(half_, length);
    reversed_.assign(half_, 0);
    for (std::size_t i = 1, j = 0; i < half_; ++i) {
        std::size_t bit = half_ / 2;
        while ((j & bit) != 0) {
            j ^= bit;
            bit /= 2;
        }
        j |= bit;
        reversed_[i] = j;
    }
}

// Even samples go into the real part and odd samples into the imaginary part of a complex
// waveform of half the length.
void RealInverseFourier::run(std::span<const Cx> spectrum, std::vector<Cx>& work,
                             std::span<double> wave) const {
    work.resize(half_);
    const auto bin = [&](std::size_t k) { return k < spectrum.size() ? spectrum[k] : Cx{}; };
    for (std::size_t k = 0; k < half_; ++k) {
        Cx here = bin(k);
        const Cx there = k == 0 ? Cx{} : bin(half_ - k);
        if (k == 0) here.im = 0;
        const Cx mirrored{there.re, -there.im};
        const Cx turned = unpack_[k] * (here - mirrored);
        work[reversed_[k]] = (here + mirrored) + Cx{-turned.im, turned.re};
    }
    // Bin 0 stands alone: its mirror is the bin at half the sampling rate, which is zero here.
    const double mean = spectrum.empty() ? 0.0 : spectrum[0].re;
    work[reversed_[0]] = {mean, mean};

    for (std::size_t span = 1, stride = half_ / 2; span < half_; span *= 2, stride /= 2) {
        for (std::size_t start = 0; start < half_; start += 2 * span) {
            for (std::size_t k = 0; k < span; ++k) {
                const Cx upper = work[start + k];
                const Cx lower = turn_[k * stride] * work[start + k + span];
                work[start + k] = upper + lower;
                work[start + k + span] = upper - lower;
            }
        }
    }
    for (std::size_t n = 0; n < half_; ++n) {
        wave[2 * n] = work[n].re;
        wave[2 * n + 1] = work[n].im;
    }
}

}  // namespace lanewright::sim
