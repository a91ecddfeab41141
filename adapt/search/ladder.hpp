#pragma once
// Purpose:   what a careful engineer would do by hand: a ladder of codes ordered by peaking, made
//            from the element tables alone, then single steps of one code around its best rung.
// Ownership: pure functions on values.
// Threads:   any.

#include <cstddef>
#include <memory>
#include <span>
#include <vector>

#include "adapt/search/code_space.hpp"
#include "adapt/search/procedure.hpp"

namespace lanewright {

constexpr std::size_t ladder_rungs = 16;

// At most `rungs` different allowed codes from the least to the most peaking that the banks can
// make, evenly spaced in dB. Of all codes near a rung's peaking those are taken that lose least at
// high frequencies, have their pole near half the bit rate and their impedance level near the
// middle of what the banks offer. Empty where an element table is unknown.
std::vector<Codes> peaking_ladder(const CodeSpace& space, double bit_rate_hz,
                                  std::size_t rungs = ladder_rungs);

std::unique_ptr<Procedure> make_ladder(const LaneProblem&, std::span<const Lesson>, RandomKey);

}  // namespace lanewright
