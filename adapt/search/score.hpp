#pragma once
// Purpose:   one number for a margin: how many times the required opening it has.
// Ownership: pure functions on values.
// Threads:   any.
//
// score = the smaller of 2 min(up, down) / required height and 2 min(left, right) / required width;
// 1 just passes. Where the monitor tells only height and width (`centred_assumed`), it is the
// smaller of height / required height and width / required width. A requirement of 0 leaves its
// direction out.
//
// Limits are 95 % two-sided: 2.5 % on each side. The score is the smallest of several sides, so
//   low  = the smallest lower limit of a side (1.96 standard errors): whichever side is truly the
//          smallest, it is above its own limit with 97.5 %;
//   high = the smallest upper limit of a side, each at 2.5 % / number of sides (Bonferroni; 2.50
//          standard errors for four sides), as any one of them could be too low by chance.
// A reading at a higher error ratio than the required one, whose edges carry their slopes, is
// carried to the required ratio on the Q scale (carried_edge in adapt/stats/q_scale.hpp); the score
// is then marked as extrapolated.
//
// A side known only as "at most" (a closed latched eye) counts as 0, its lower limit is unknown
// (-infinity) and its upper limit starts at the bound. A side known only as "at least" counts as
// its bound and has no upper limit.

#include <span>

#include "adapt/search/procedure.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

struct Score {
    double value = 0;
    double low = 0, high = 0;    // may be infinite
    double std_error = 0;        // of the side that sets the value
    Bound bound = Bound::exact;  // of that side
    Basis basis = Basis::counted;
    Status status = Status::void_reading;
};

// No lock: value and low -infinity, high 0 (or that of the edges, in a mean that has some).
// Void, an edge missing (or not a number) that the requirement needs, or nothing required at all:
// value and low -infinity, high +infinity.
Score score_of(const Reading& reading, const Required& required);

// Several readings of the same codes as one, edge by edge. `noise` tells how much of the standard
// error is the monitor's step.
//
// A step does not average away like noise: without noise every reading of an eye gives the same
// step, and the mean is as wrong as one. With Gaussian noise of sigma the error that no number of
// readings removes has the variance sum over k of step^2 / (2 pi^2 k^2) exp(-(2 pi k sigma /
// step)^2), which is step^2/12 without noise and vanishes from sigma = step/2 on (Widrow & Kollar,
// "Quantization Noise", 2008). It is taken with the smaller of the declared and the observed sigma,
// and the rest of the variance, over the number of readings, with the larger of the two: each is
// the unfavourable choice.
//
// Edges that are bounds: all "at most" or all "at least" stay so, and the loosest bound is kept;
// mixed with plain values, the mean is a bound on the same side; both kinds of bound on one edge
// leave nothing known (infinite standard error).
// A counted monitor's positions are off by the same every time: half of the declared non-linearity,
// as far as a reading's own error holds it, is taken as lasting, too. The standard error of a
// slope, which is mostly that, is the smallest among the readings.
//
// A reading without lock makes the whole no_lock. Void readings are left out. Centre error ratios
// are averaged over the bits where all that are closed have one.
Reading mean_of(std::span<const Reading> readings, const MonitorNoise& noise);

// How far an edge of so many mV may be off because the monitor's step is known only to a share of
// itself (0.1: 10 %). It is the same for every reading and does not belong to the standard error.
double systematic_mv(double edge_mv, double step_tolerance);

// The log likelihood of a true edge, as a strategy weighs its guesses. A latched one (`step` above
// 0) is an interval: half a step to either side of what was latched, blurred by the repeatability
// `sigma`. A counted one (`step` 0) is normal with its standard error; then `sigma` adds what the
// guess itself leaves open. A bound is open on its far side.
double edge_log_likelihood(const Measured& edge, double step, double sigma, double truth);

// Variance of a mean of `count` readings that stays even for count -> infinity; see mean_of.
double lasting_variance(double step, double sigma);

}  // namespace lanewright
