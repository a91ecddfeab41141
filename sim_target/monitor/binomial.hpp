#pragma once
// Purpose:   how many of so many bits are wrong: a binomial draw, for any count and share.
// Ownership: none.  Threads: pure function of the generator handed in.
// Source:    below 10 expected errors inversion by sequential search from zero (Kachitvichyanukul
//            and Schmeiser, Commun. ACM 31(2), 1988); else transformed rejection with squeeze,
//            algorithm BTRS of Hörmann, J. Statist. Comput. Simul. 46, 101-110, 1993 (citations
//            from memory). Both are exact but for the arithmetic.

#include <cstdint>

#include "sim_target/physics/keyed_random.hpp"

namespace lanewright::sim {

// `share` is held inside 0 to 1. bits up to 2^50.
std::uint64_t binomial(std::uint64_t bits, double share, KeyedRandom& random);

}  // namespace lanewright::sim
