#pragma once
// Purpose:   exact confidence limits for counted errors.
// Ownership: pure functions.
// Threads:   any.
// `confidence` is inside (0, 1), else both limits are NaN. A one-sided limit at 95 % leaves 5 % on
// its side; a two-sided pair leaves half of that on each. Which of the two is meant must be chosen
// before the data are seen (Feldman & Cousins, Phys. Rev. D 57, 3873, 1998).

#include <cstdint>

namespace lanewright {

struct Limits {
    double low = 0, high = 0;
};

enum class Sides : std::uint8_t { one, two };

// Limits on the expected number of events after `events` were seen in a run of fixed length
// (Garwood, Biometrika 28, 437-442, 1936). Divide by the bits for limits on the error ratio.
Limits poisson_limits(std::uint64_t events, double confidence, Sides sides);

// The same for a run that ended with its k-th event: the chance then lies in the length, which has
// a gamma distribution of order k, and the upper limit takes k where a run of fixed length
// takes k + 1. k = 0 gives [0, infinity].
Limits stopped_run_limits(std::uint64_t kth_event, double confidence, Sides sides);

// Limits on the chance of an event after `events` in `trials` (Clopper & Pearson, Biometrika 26,
// 404-413, 1934). No trials, or more events than trials: [0, 1].
Limits binomial_limits(std::uint64_t events, std::uint64_t trials, double confidence, Sides sides);

// Wilson's approximate two-sided limits (J. Am. Stat. Assoc. 22, 209-212, 1927), for comparison.
Limits wilson_limits(std::uint64_t events, std::uint64_t trials, double confidence);

// The chance, if two runs of the given lengths had one and the same error ratio, that the first
// shows as few errors as `errors_a` out of the sum of both (the conditional binomial test of
// Przyborowski & Wilenski, Biometrika 31, 313-323, 1940). One-sided. 1 where there is no data.
double fewer_errors_chance(std::uint64_t errors_a, double bits_a, std::uint64_t errors_b,
                           double bits_b);

}  // namespace lanewright
