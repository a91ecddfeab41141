#pragma once
// Purpose:   a lane for tests of searches: a landscape of margins, read through a latching monitor
//            without I/O. Not the simulated board: no physics, just stated numbers.
// Ownership: values only.
// Threads:   one test each.

#include <functional>
#include <memory>
#include <vector>

#include "adapt/margin/latched.hpp"
#include "adapt/search/procedure.hpp"

namespace lanewright::tests {

struct Truth {
    double up_mv = 0, down_mv = 0, left_ui = 0, right_ui = 0;
    bool locked = true;
};

struct BenchOfOne {
    std::function<Truth(const Codes&)> truth;
    MonitorGrid monitor{2.0, 1.0 / 64, 127, 31, 0, 0};
    std::uint64_t seed = 1;
    bool quantised = true;

    // Counts readings itself, to key the noise by their ordinal.
    std::uint32_t ordinal = 0;
    Reading read(const Request& request);
};

struct Outcome {
    Decision decision;
    std::vector<Codes> asked;          // in the order proposed
    std::vector<std::size_t> batches;  // their sizes
};

// Runs a procedure to its end on that bench; fails the test if it does not end within `most`.
// Checks at every batch that proposing twice gives the same and that the space allows the codes.
Outcome run(Procedure& procedure, const LaneProblem& problem, BenchOfOne& bench,
            std::size_t most = 100'000);

// Banks of 5, 4, 4 and 3 bits (r1, r2, c1, c2) with element tables, linear in conductance and
// capacitance.
CodeSpace equalizer_space(std::vector<Forbidden> forbidden = {});

// Dimensions named a, b, ... of unknown kind with codes 0 .. counts[i]-1.
CodeSpace plain_space(const std::vector<std::int32_t>& counts,
                      std::vector<Forbidden> forbidden = {});

LaneProblem problem_on(const CodeSpace& space, Codes present, double readings = 0);

// Heights and widths that fall off evenly around one best point; opening in mV and UI there.
Truth cone(const CodeSpace& space, const Codes& codes, const Codes& best, double height_mv,
           double width_ui, double steepness);

}  // namespace lanewright::tests
