#pragma once
// Purpose:   the tail of the normal distribution and its inverse: the Q scale on which error ratios
//            are compared and extrapolated. Q(x) = erfc(x / sqrt 2) / 2.
// Ownership: pure functions.
// Threads:   any.

namespace lanewright {

// The probability that a standard normal value exceeds x. Full relative accuracy down to the
// smallest double; 0 beyond x of about 38.
double normal_tail(double x);

// The natural logarithm of normal_tail, good for any x (no underflow).
double log_normal_tail(double x);

// The x whose tail is `ratio`: normal_tail(normal_q(p)) == p. Relative accuracy of about 1e-14
// from 1e-300 to 1/2. A ratio of 0 or less gives +infinity, of 1 or more -infinity.
double normal_q(double ratio);

// The same from the natural logarithm of the ratio, for ratios no double can hold.
double normal_q_of_log(double log_ratio);

}  // namespace lanewright
