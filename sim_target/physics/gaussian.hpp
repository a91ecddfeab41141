#pragma once
// Purpose:   the normal distribution's tail and its inverse.
// Ownership: none.  Threads: pure functions.

namespace lanewright::sim {

// Probability that a standard normal value exceeds x; accurate to 1e-300.
double gaussian_tail(double x);

// The same from a table, some ten times faster; relative accuracy 1e-8.
double quick_gaussian_tail(double x);

// The x whose tail is `probability`, inside (0, 1); accurate to 1e-12 relative of the tail.
double gaussian_tail_inverse(double probability);

}  // namespace lanewright::sim
