#pragma once
// Purpose:   the value of one of many noisy measurements, freed of the luck that made it stand out:
//            the best of many is too good on average.
// Ownership: pure functions on values.
// Threads:   any.

#include <cstddef>
#include <span>

namespace lanewright {

struct Noisy {
    double value = 0;
    double std_error = 0;  // above 0
};

struct Posterior {
    double mean = 0, std_error = 0;
    std::size_t compared_with = 0;  // values near enough to matter, the chosen one included
};

// Mean and standard deviation of the true value behind `all[chosen]`, if the true values are drawn
// from one common distribution and the noise is normal. The distribution is not assumed but
// estimated from all values by maximum likelihood (Kiefer & Wolfowitz, Ann. Math. Stat. 27,
// 887-906, 1956), on a grid, by expectation maximisation (Laird, J. Am. Stat. Assoc. 73, 805-811,
// 1978). A posterior mean needs no further correction for selection (Efron, "Tweedie's formula and
// selection bias", J. Am. Stat. Assoc. 106, 1602-1614, 2011). It is the James-Stein idea with the
// prior's shape left free, as the best codes of a landscape lie at the end of a skew distribution
// and far from its mean.
// With one value only, that value. Values or errors that are not finite, or errors not above 0,
// must be left out by the caller.
Posterior shrunk(std::span<const Noisy> all, std::size_t chosen);

}  // namespace lanewright
