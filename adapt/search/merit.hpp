#pragma once
// Purpose:   the order in which a search prefers readings.
// Ownership: values only.
// Threads:   any.
//
// The score alone is too coarse to steer by: a latching monitor's steps make many neighbours equal,
// and every closed eye of it scores 0. Equal scores are told apart by how wide the other sides are,
// with the narrow ones counting most (a harmonic mean), which also gives a slope where only some
// edges are closed.

#include "adapt/search/procedure.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

struct Merit {
    int rank = 0;          // 0 no lock, 1 closed, 2 open or saturated
    double score = 0;      // value of the score, below zero where counted so; 0 at rank 0
    double roundness = 0;  // harmonic mean of the sides, in units of score; at least 0

    auto operator<=>(const Merit&) const = default;
};

// Whether closed eyes of this kind can be told apart: some edges are open, or the score goes on
// below zero, as a counting monitor's does.
bool gives_slope(const Merit& merit);

Merit merit_of(const Reading& reading, const Required& required);

}  // namespace lanewright
