#pragma once
// Purpose:   finds the four edges of an eye with a counting monitor: says where to look next, takes
//            the counts, and makes the reading of them.
// Ownership: owns its looks and counts.
// Threads:   one caller at a time; no clock, no randomness: the same counts give the same looks.

#include <cstddef>
#include <cstdint>
#include <memory>
#include <optional>
#include <span>
#include <vector>

#include "adapt/values/values.hpp"

namespace lanewright {

// What a counting monitor can be told, as the board file declares it. Phase and offset are from
// the data sampler's decision point, in whole steps.
struct LookGrid {
    double offset_step_mv = 0, phase_step_ui = 0;
    std::int32_t offset_most_steps = 0, phase_most_steps = 0;  // to either side
    std::uint64_t least_bits = 0, most_bits = 0;               // of one look
    bool bits_by_powers_of_two = true;
    std::uint64_t most_errors = 0;  // where the counter stops; 0: it does not
    std::size_t most_looks = 16;    // of one reading
    ErrorDefinition error_definition = ErrorDefinition::pattern;
    double offset_sigma_mv = 0, phase_sigma_ui = 0;  // repeatability of one edge, 1 sigma
};

class EdgeSearch {
  public:
    EdgeSearch(const MarginWanted& wanted, const LookGrid& grid);
    ~EdgeSearch();
    EdgeSearch(EdgeSearch&&) noexcept;
    EdgeSearch& operator=(EdgeSearch&&) noexcept;

    // The next looks, at most so many; empty: finished. Asking twice gives the same answer.
    std::vector<Look> next(std::size_t at_most) const;
    // The counts of the looks that next() gave last, in their order.
    void told(std::span<const Count> counts);
    // Once finished. Codes, condition and cost are left for the caller.
    std::optional<Reading> result() const;

  private:
    struct State;
    std::unique_ptr<State> state_;
};

}  // namespace lanewright
