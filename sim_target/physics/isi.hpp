#pragma once
// Purpose:   the distribution of intersymbol interference with Gaussian noise, and peak distortion.
// Ownership: an object owns its work memory and is filled anew for each sampling phase.
// Threads:   one thread at a time per object.
// Symbols are ±1, independent and equally likely; every tap that is not the cursor adds its value
// with the sign of its symbol. Units are those of the taps.
// Source:    peak distortion: Casper, Haycock, Mooney, Symp. VLSI Circuits 2002. Distribution by
//            convolution: Stojanovic, Horowitz, CICC 2003 (from memory).

#include <span>
#include <vector>

#include "sim_target/physics/compression.hpp"

namespace lanewright::sim {

// Sum of the absolute values: the most that the other symbols can take away.
double peak_distortion(std::span<const double> other_taps);

class NoisyIsi {
  public:
    // The two sigmas together above zero. `early_sigma`: of the noise that comes with the taps;
    // `late_sigma`: of what a stage adds after itself (see the second form of below()).
    // With at most exact_taps taps that matter the support is enumerated; else it is a grid of a
    // quarter of the noise's sigma: each tap is shared between the two nearest grid values, and the
    // variance that this adds is taken out of the Gaussian part, so the first three moments are
    // exact. Taps below a tenth of sigma are too small to shape the tail; they add their variance
    // to the Gaussian part (at an error ratio of 1e-6 this moves a level by some 0.02 sigma).
    void fill(std::span<const double> other_taps, double early_sigma, double late_sigma = 0);

    // Probability that interference and noise together are below `level`; relative accuracy 1e-9 of
    // what the support above allows, down to 1e-290.
    // `more_sigma`: further early Gaussian noise, for this call only.
    double below(double level, double more_sigma = 0, double known = 0) const;
    // The same for `centre` plus interference behind a compressive stage: the stage acts on the
    // support, early noise goes through its slope there, late noise is added after it.
    // `known`: what the result will be added to, so that parts far below it may be left out.
    double below(const Compression& stage, double centre, double threshold, double more_sigma = 0,
                 double known = 0) const;
    // The level with below(level) = probability, inside (0, 1/2).
    double level_at(double probability) const;
    double lowest() const { return value_.front(); }  // of the support, without noise

    double sigma() const { return sigma_; }  // of the Gaussian part, before any stage
    // Of the Gaussian part after a stage that passes small signals with `slope`.
    double sigma_after(double slope, double more_sigma) const;
    std::size_t support_size() const { return value_.size(); }
    std::span<const double> support() const { return value_; }
    std::span<const double> weights() const { return weight_; }

    static constexpr std::size_t exact_taps = 8;

  private:
    void enumerate();
    void convolve();
    void finish();

    std::vector<double> large_;  // absolute values, ascending
    std::vector<double> value_;  // ascending support
    std::vector<double> weight_;
    std::vector<double> sum_before_;  // weights of all values below this one
    std::vector<double> work_, next_;
    double early_variance_ = 1;  // below zero where the grid has added more than there was
    double late_variance_ = 0;
    double sigma_ = 1;
};

}  // namespace lanewright::sim
