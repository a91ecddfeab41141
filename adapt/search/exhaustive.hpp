#pragma once
// Purpose:   reading every code, or every n-th of each dimension.
// Ownership: as StagedSearch.
// Threads:   one caller at a time.

#include <cstdint>
#include <memory>
#include <span>
#include <vector>

#include "adapt/search/procedure.hpp"

namespace lanewright {

// The codes of each dimension that a grid reads, lowest first.
struct Grid {
    std::vector<std::vector<std::int32_t>> codes;
    bool thinned = false;  // fewer than the stride asks for, so that the grid fits

    std::uint64_t size() const;
    Codes at(std::uint64_t index) const;  // first dimension slowest
};

// Every stride-th code of each dimension, centred in its range. A grid of more than `most` points
// is thinned, the dimension with the most codes first, and then spread evenly: a budget that ends
// the reading half way would leave whole regions out instead.
Grid make_grid(const CodeSpace& space, std::uint32_t stride, std::uint64_t most);

std::unique_ptr<Procedure> make_exhaustive(const LaneProblem&, std::span<const Lesson>, RandomKey);

}  // namespace lanewright
