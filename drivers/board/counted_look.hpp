#pragma once
// Purpose:   a counted monitor's looks as codes, and its answers as counts.
// Ownership: values only.
// Threads:   no shared state.
//
// A look's place is told from the origin, the data sampler's decision point; its codes are whole
// steps away from the origin's codes.

#include <cstdint>

#include "adapt/margin/edge_search.hpp"
#include "adapt/values/values.hpp"
#include "drivers/board/sequences.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

class LookScale {
  public:
    // Origin at the monitor's centres until set_origin.
    explicit LookScale(const BoardFile& board);

    // The codes of the decision point. Cause::refused where they leave no room to look.
    Result<void> set_origin(std::uint32_t offset_code, std::uint32_t phase_code);
    double origin_mv() const;  // from the monitor's centre
    double origin_ui() const;

    // Reach and steps as seen from the origin, for a search.
    LookGrid grid() const;

    // A look as it can be told: nearest steps, within the monitor's codes; bits within its limits,
    // and the next power of two where it is told an exponent.
    Look placed(const Look& wanted) const;
    // Fills in what the `look` sequence writes. `look` must be placed.
    void tell(const Look& look, SequenceValues& values) const;

    // Cause::not_allowed for a place or dwell that is not one, or beyond the declared reach.
    Result<void> check(const Look& wanted) const;

    // Cause::not_accepted where the monitor tells no errors, or more errors than bits.
    Result<Count> count(const Look& placed, const Compiled::Values& values) const;

  private:
    struct Axis {
        double step = 1;
        std::int64_t lowest = 0, highest = 0, centre = 0, origin = 0, most_steps = 0;
        std::int64_t steps_of(double distance) const;  // within the codes
        std::int64_t room() const;                     // to the nearer end, at most most_steps
    };
    static Axis axis_of(const BoardFile& board, const StepSize& size, Parameter parameter);

    const BoardFile* board_;
    Axis offset_, phase_;
};

}  // namespace lanewright
