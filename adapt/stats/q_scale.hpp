#pragma once
// Purpose:   edges on the Q scale: counts of errors as likelihoods in Q, and an edge carried from
//            one error ratio to another along its slope.
// Ownership: pure functions on values.
// Threads:   any.
// Q is the normal deviate of an error ratio: ratio = erfc(Q / sqrt 2) / 2 (dual-Dirac practice,
// INCITS TR-35-2004, value from memory).

#include <cstdint>

#include "adapt/values/values.hpp"

namespace lanewright {

// By how much the slope of an edge may change, relative to itself, for each unit of Q: one standard
// deviation. A Gaussian edge does not change at all; the interference of several symbols bends it
// by up to a tenth or two (`dev bench margin` shows what comes of it on mixtures of that kind).
constexpr double bend_per_q = 0.1;

// Derivatives of the log likelihood of counted errors with respect to Q, at a given Q.
struct Pull {
    double gradient = 0;
    double information = 0;  // observed Fisher information: minus the second derivative
};

// `errors` in `bits` at the error ratio of q: binomial, or, where the counter had stopped at its
// top, at least so many (`at_least`).
Pull pull_of(double errors, double bits, bool at_least, double q);

// The log likelihood itself, without the part that does not depend on q.
double log_likelihood_of(double errors, double bits, bool at_least, double q);

// The expected Fisher information about Q of a look of so many bits.
double expected_information(double bits, double q);

// An edge stated at one error ratio, carried to another along its slope (distance lost per unit of
// Q). Its standard error joins, as if they stood or fell together (which bounds any correlation of
// the two), that of the edge and that of the slope; and bend_per_q, independently. A slope that was
// not told (a bound) leaves the edge's value with an infinite standard error.
Measured carried_edge(const Measured& edge, const Measured& slope, double from_ratio,
                      double to_ratio);

// The log likelihood of a true value of which only an interval was seen, through Gaussian noise of
// sigma: ln(Phi((high - truth) / sigma) - Phi((low - truth) / sigma)). Either end may be infinite;
// sigma 0: 0 inside, -infinity outside.
double log_interval_likelihood(double low, double high, double truth, double sigma);

}  // namespace lanewright
