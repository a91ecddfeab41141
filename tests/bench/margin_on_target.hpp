#pragma once
// Purpose:   counted readings of the simulated board's monitor, without wires, against its own
//            noise-free edges: another hand's monitor than the one that the readings were tuned on.
// Ownership: pure functions.
// Threads:   any; one lane at a time.

#include <cstdint>
#include <vector>

namespace lanewright::bench {

struct OnTarget {
    std::size_t edges = 0, inside = 0, unbounded = 0, mistaken = 0;  // mistaken: open for closed
    std::vector<double> looks, error_steps;
};

// Of every lane of so many chips of the demo target's kind, four codes whose eye is open at 1e-6 by
// the monitor; each is read once, after other codes. The readings of one lane share its drift, so
// chips count more than codes. Throws std::runtime_error where the file cannot be used.
OnTarget read_on_target(std::uint64_t seed, std::uint32_t chips);

}  // namespace lanewright::bench
