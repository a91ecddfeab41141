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
#include "sim_target/physics/pulse.hpp"
#include "sim_target/physics/slice.hpp"

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
    double noise_mv = 0;  // rms at the sampler, jitter and compression not included
    double height_mv() const { return up_mv + down_mv; }
    double width_ui() const { return left_ui + right_ui; }
};

struct Required {
    double height_mv = 0, width_ui = 0, error_ratio = 1e-6;
};

// The smaller of 2·min(up, down)/height and 2·min(left, right)/width; 1 just passes.
double score(const Margins& margins, const Required& required);

// Where the sampler decides, beside the recovered phase and zero volts.
struct Decision {
    double offset_mv = 0, phase_ui = 0;
};

class Eye {
  public:
    explicit Eye(const Grid& grid);

    // The neighbours' signal: each aggressor adds `size` times the pulse, which fill() puts in.
    struct Crosstalk {
        std::span<const double> pulse_mv;
        std::span<const Aggressor> aggressors;
    };
    static constexpr std::size_t most_crosstalk = 2;  // kinds, each with a pulse of its own
    // Pulses: one window, circular, samples_per_ui a unit interval.
    void fill(std::span<const double> pulse_mv, const Disturbance& disturbance,
              const Decision& decision, std::span<const Crosstalk> crosstalk = {});

    // The recovered sampling phase without the decision's own offset; see Pulse.
    double recovered_phase_ui() const { return recovered_ui_; }
    double cursor_mv(double phase_ui) const { return pulse_.at(phase_ui); }

    // At a phase and threshold relative to the decision point.
    double error_ratio_at(double phase_ui, double offset_mv);
    // error_ratio in (0, 0.1]; `moved`: of the decision point, beside its own offsets.
    Margins margins(double error_ratio, const Decision& moved = {});
    // The level at the error ratio that the eye leaves free above (and, mirrored, below) zero
    // volts at `phases` (from 2) phases from half a unit interval before to half after the
    // recovered phase; below zero where it is closed.
    std::vector<double> contour_mv(double error_ratio, std::size_t phases);
    // A quick estimate of the score for ranking; see Slice::screening_level().
    double screening_score(const Required& required);

    // What the ones and zeros do at a phase relative to the decision point, kept until the next
    // fill() or until seven other phases have been asked for.
    const Slice& slice_at(double phase_ui);

    // Between the crossings that one in a thousand of the transitions comes before and one in a
    // thousand comes after, interference and noise together, each side at most half a unit
    // interval from the median crossing.
    double crossing_spread_ui();

  private:
    struct Kept {
        Slice slice;
        double phase_ui = 0;
        unsigned used = 0;  // when, 0: never filled
    };
    struct Start {
        double phase_ui = 0, offset_mv = 0;
    };
    const Slice& slice_at_absolute(double phase_ui);
    double edge_time_ui(const Start& start, double wanted, double at_centre, double side);
    double crossing_reach_ui(double side);
    double screening_level(double phase_ui, double deviate);

    Grid grid_;
    Pulse pulse_;
    std::vector<Pulse> crosstalk_;
    std::vector<Aggressor> aggressors_;
    Disturbance disturbance_;
    Decision decision_;
    double recovered_ui_ = 0;
    Slice work_;  // of phases on the way to an edge
    std::array<Kept, 8> kept_;
    unsigned clock_ = 0;
    NoisyIsi crossing_;
};

}  // namespace lanewright::sim
