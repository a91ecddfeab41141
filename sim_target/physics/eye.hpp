#pragma once
// Purpose:   from a pulse response and noise to the eye: sampling phase, error ratio at any phase
//            and threshold, and the four distances from the decision point to the edges.
// Ownership: an Eye owns its work memory and is filled anew for each set of codes.
// Threads:   one thread at a time per object.
//
// Voltages are differential, symbols are ±1, the pulse is the response to one symbol of +1. The
// error ratio at a threshold counts all bits: half of what the ones and half of what the zeros
// lose.

#include <array>
#include <span>
#include <vector>

#include "sim_target/physics/channel.hpp"
#include "sim_target/physics/isi.hpp"

namespace lanewright::sim {

// Distances from the decision point; all above zero where the eye is open at the error ratio.
// Where it is closed they continue below zero: up and down to the level that the ones and the
// zeros reach with the error ratio; left and right as half a unit interval times the missing share
// of the normal deviate (0 where the centre just reaches the ratio, -1/2 at half errors).
struct Margins {
    bool locked = false;  // the waveform has a median crossing and a positive cursor
    bool closed = true;
    double up_mv = 0, down_mv = 0, left_ui = 0, right_ui = 0;
    double centre_error_ratio = 0.5;
    double noise_mv = 0;  // rms at the sampler, jitter not included
    double height_mv() const { return up_mv + down_mv; }
    double width_ui() const { return left_ui + right_ui; }
};

struct Required {
    double height_mv = 0, width_ui = 0, error_ratio = 1e-6;
};

// The smaller of 2·min(up, down)/height and 2·min(left, right)/width; 1 just passes.
double score(const Margins& margins, const Required& required);

// What disturbs the sampler: noise above zero, and random jitter of the sampling instant.
// Jitter acts as noise in proportion to the waveform's slope, which depends on the data: the symbol
// itself and its two neighbours are taken as they come, the slopes of all others by their mean
// square. Right to first order in the jitter.
struct Disturbance {
    double noise_mv = 1;
    double jitter_ui = 0;
};

// Where the sampler decides, beside the recovered phase and zero volts.
struct Decision {
    double offset_mv = 0, phase_ui = 0;
};

class Eye {
  public:
    explicit Eye(const Grid& grid) : grid_(grid), taps_(grid.window_ui) {}

    // `pulse_mv`: one window, circular, samples_per_ui a unit interval.
    void fill(std::span<const double> pulse_mv, const Disturbance& disturbance,
              const Decision& decision);

    // The recovered sampling phase without the decision's own offset: half a unit interval after
    // the median crossing. The symbols around a transition are symmetric about zero, so the median
    // of the waveform there is p(t − T) − p(t) and the crossing is where these two are equal. In
    // unit intervals from the start of the window; of several the one with the largest cursor.
    double recovered_phase_ui() const { return recovered_ui_; }
    double cursor_mv(double phase_ui) const { return pulse_at(phase_ui); }

    // At a phase and threshold relative to the decision point.
    double error_ratio_at(double phase_ui, double offset_mv);
    // error_ratio in (0, 0.1].
    Margins margins(double error_ratio);
    // A quick estimate of the score for ranking: interference of more than the noise by its worst
    // case, smaller interference as noise.
    double screening_score(const Required& required);

  private:
    // What the ones are around, by the signs of the symbols before and after.
    struct Surroundings {
        double centre_mv = 0, jitter_mv = 0;
    };
    Surroundings surroundings(std::size_t index) const;
    double pulse_at(double phase_ui) const;
    double find_phase() const;
    void take_taps(double phase_ui);  // fills taps_ (the cursor first) and slopes
    void settle_at(double phase_ui);  // taps and their distribution at an absolute phase
    double lost_ones(double threshold_mv) const;  // share of the ones that are below
    double level_of_ones(double share) const;     // the threshold below which that share is
    double ratio(double threshold_mv) const;
    double edge_time_ui(double wanted, double at_centre, double side);
    void open_heights(double error_ratio, Margins& margins) const;
    double screening_level(double phase_ui, double deviate);

    Grid grid_;
    std::vector<double> pulse_;
    std::vector<double> taps_;
    double slope_now_ = 0, slope_before_ = 0, slope_after_ = 0;  // of three taps, mV per UI
    double slope_others_ = 0;                                    // squared and added up
    std::array<Surroundings, 4> around_;
    Disturbance disturbance_;
    double recovered_ui_ = 0;
    Decision decision_;
    NoisyIsi isi_;
};

}  // namespace lanewright::sim
