#pragma once
// Purpose:   the eye at one sampling phase: how many ones and zeros are lost at a threshold.
// Ownership: a Slice owns its work memory and is filled anew for each phase.
// Threads:   const calls may run at the same time.
//
// The cursor and its two neighbours are taken as they come (four surroundings of a one); all other
// symbols and the crosstalk are a distribution. Jitter of the sampling instant acts as early noise
// in proportion to the waveform's slope, which depends on the data: exactly as the symbol and its
// two neighbours make it, in the mean square for all others. Right to first order in the jitter.

#include <array>
#include <span>
#include <vector>

#include "sim_target/physics/compression.hpp"
#include "sim_target/physics/isi.hpp"
#include "sim_target/physics/pulse.hpp"

namespace lanewright::sim {

// What disturbs the sampler. Early and late noise together above zero.
struct Disturbance {
    double noise_mv = 1;   // early: ahead of the compressive stage
    double jitter_ui = 0;  // random, of the sampling instant
    double late_mv = 0;    // after the stage
    Compression stage = {};
};

// A neighbour's signal: random symbols of the same rate, at a fixed phase to ours.
struct Aggressor {
    const Pulse* pulse = nullptr;  // at the equalizer's output
    double size = 1;               // times the pulse
    double phase_ui = 0;
};

class Slice {
  public:
    void fill(const Pulse& pulse, std::span<const Aggressor> aggressors,
              const Disturbance& disturbance, double phase_ui);

    double cursor_mv() const { return taps_.front(); }
    double sigma_mv() const { return isi_.sigma(); }

    double lost_ones(double threshold_mv) const;    // share of the ones that come out below
    double level_of_ones(double share) const;       // the threshold below which that share is
    double error_ratio(double threshold_mv) const;  // half of the ones' and half of the zeros'
    // Share of bits that are wrong both here and at `other`'s threshold. The interference here
    // follows that of the other place by linear regression; their noises are independent. Exact
    // where both are at one phase.
    double both_wrong(double threshold_mv, const Slice& other, double other_threshold_mv) const;

    // A quick estimate, for ranking, of the level that the ones reach at `deviate` normal
    // deviates: interference of more than the noise by its worst case, smaller interference as
    // noise. Only cursor_mv() may be asked afterwards.
    double screening_level(const Pulse& pulse, std::span<const Aggressor> aggressors,
                           const Disturbance& disturbance, double phase_ui, double deviate);

  private:
    // What the ones are around, by the signs of the symbols before and after.
    struct Surroundings {
        double centre_mv = 0, jitter_mv = 0;
    };
    void take(const Pulse& pulse, std::span<const Aggressor> aggressors, double phase_ui);
    Surroundings surroundings(std::size_t index) const;

    std::vector<double> taps_, slopes_;          // of the own pulse, the cursor first
    std::vector<double> others_;                 // taps that are not the cursor or beside it
    std::vector<double> far_taps_, far_slopes_;  // of an aggressor
    double slope_others_ = 0;                    // squared and added up
    std::array<Surroundings, 4> around_;
    std::array<std::size_t, 4> worst_first_{0, 1, 2, 3};
    Disturbance disturbance_;
    NoisyIsi isi_;
};

}  // namespace lanewright::sim
