#pragma once
// Purpose:   what a counting monitor has shown along one direction from the decision point.
// Ownership: values only.
// Threads:   any.

#include <cstddef>
#include <cstdint>
#include <span>
#include <vector>

namespace lanewright {

// All that was counted at one position. Steps count outwards from the decision point.
struct Seen {
    std::int32_t steps = 0;
    double bits = 0, errors = 0;
    bool at_least = false;  // the counter had stopped at its top
    std::size_t looks = 1;  // that it took

    double ratio() const { return bits > 0 ? errors / bits : 0; }
    // The ratio on the Q scale, a third of an error added so that none and all stay finite (the
    // median of the ratio behind a count, to within a few percent). EdgeLooks fills it in.
    double q = 0;
};

// More errors at `more` than chance or a little drift explains: above three times the ratio of
// `fewer`, by five standard deviations.
bool contradicts(const Seen& more, const Seen& fewer);

class EdgeLooks {
  public:
    // Counts at one position are added up; one that hit the counter's top gives way to one that
    // did not. Of two that contradict each other the one with fewer errors is kept: bursts and
    // slips of a checker only add errors.
    void add(const Seen& seen);

    // In the order of their positions.
    std::span<const Seen> seen() const { return seen_; }
    // A position looked at only once that had far more errors than one further out; null if none.
    const Seen* suspect() const;
    // Null if nothing was counted there.
    const Seen* at(std::int32_t steps) const;

  private:
    std::vector<Seen> seen_;
};

}  // namespace lanewright
