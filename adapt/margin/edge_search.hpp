#pragma once
// Purpose:   finds the four edges of an eye with a counting monitor: says where to look next, takes
//            the counts, and makes the reading of them.
// Ownership: owns its looks and counts.
// Threads:   one caller at a time; no clock, no randomness: the same counts give the same looks.
//
// Each edge is a line on the Q scale (error ratio = erfc(Q / sqrt 2) / 2; dual-Dirac practice,
// INCITS TR-35-2004) through counts near the error ratio asked for and near ten times that ratio:
// it is solved by maximum likelihood over the binomial counts, so the edge comes out finer than a
// step and brings its slope. Offsets are whole steps and therefore known exactly but for the
// declared non-linearity. Standard errors join the observed Fisher information, that
// non-linearity, a small allowance for a line that is not quite straight, and the declared
// repeatability.
//
// First looks are short: as many bits as Wald's sequential test (Ann. Math. Stat. 16, 117-186,
// 1945) needs to take "no errors" for an error ratio below the one asked for rather than at ten
// times it. Where a short look shows that the centre itself is far too bad, the reading ends early.
//
// Reading that comes of it:
//   open       four edges with slopes, at `error_ratio` = counted_ratio(), basis counted;
//   saturated  some edge lies beyond the range: at least that far;
//   closed     `pattern`: the centre error ratio, and signed distances continued on the Q scale:
//              up and down to where the ones and the zeros alone would reach the ratio, left and
//              right as half a unit interval times the missing share of Q, both below zero.
//              `decision`: some edge is "at most" the first position that is bad, and there is no
//              centre error ratio, as a monitor that compares with the receiver's own decision sees
//              no errors at zero offset.
// A slope that the counts did not tell stands as "at least 0".

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
    // How far a position may be off, 1 sigma in steps, each for itself and the same every time.
    double offset_nonlinearity_steps = 0, phase_nonlinearity_steps = 0;
};

// The error ratio at which a reading of this dwell states its edges: the one asked for where the
// dwell lets it be counted, else that times the smallest power of ten that can be.
double counted_ratio(const MarginWanted& wanted, const LookGrid& grid);

class EdgeSearch {
  public:
    EdgeSearch(const MarginWanted& wanted, const LookGrid& grid);
    ~EdgeSearch();
    EdgeSearch(EdgeSearch&&) noexcept;
    EdgeSearch& operator=(EdgeSearch&&) noexcept;

    // The next looks, at most so many; empty: finished. Asking twice gives the same answer.
    std::vector<Look> next(std::size_t at_most) const;
    // The counts of the looks that next() gave last, in their order; each says its own look, with
    // the bits that were really dwelt on.
    void told(std::span<const Count> counts);
    // Once finished (next() is empty). Codes, condition, telemetry and cost are left for the
    // caller.
    std::optional<Reading> result() const;

  private:
    struct State;
    std::unique_ptr<State> state_;
};

}  // namespace lanewright
