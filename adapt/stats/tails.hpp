#pragma once
// Purpose:   gamma, Poisson and binomial tails under the exact limits for counts.
// Ownership: pure functions. (The C library's lgamma writes a global sign; it is not used.)
// Threads:   any.
// Arguments outside the stated range give a quiet NaN.

namespace lanewright {

// ln Gamma(x), x > 0.
double log_gamma(double x);

// x^a exp(-x) / Gamma(a + 1), without the loss of digits of the plain formula for large a
// (C. Loader, "Fast and accurate computation of binomial probabilities", 2000). a, x > 0.
double poisson_term(double a, double x);

// Regularised incomplete gamma functions: P(a, x) and Q(a, x) = 1 - P(a, x), a > 0, x >= 0.
// Series and continued fraction: Abramowitz & Stegun 6.5.29 and 6.5.31.
// For whole a, Q(a, x) is the probability of fewer than a events where x are expected.
double gamma_p(double a, double x);
double gamma_q(double a, double x);

// The chance of at most, and of at least, `events` in `trials` of chance `chance`; whole numbers
// with 0 <= events <= trials, 0 <= chance <= 1. The tail is summed outwards from its largest term,
// all terms positive, so a tail of 1e-300 keeps its digits.
double binomial_at_most(double events, double trials, double chance);
double binomial_at_least(double events, double trials, double chance);

}  // namespace lanewright
