#pragma once
// Purpose:   the directions a descent may step in, and which codes a step leads to.
// Ownership: Moves refer to the CodeSpace, which must outlive them.
// Threads:   one caller at a time (an inner table of known steps).
//
// Level 0 is the coarsest: a quarter of each range. Each further level halves the step; the last
// one reaches the neighbouring code.

#include <cstddef>
#include <memory>
#include <optional>
#include <string>

#include "adapt/search/code_space.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

class Moves {
  public:
    virtual ~Moves() = default;
    virtual std::size_t axes() const = 0;
    virtual std::size_t levels() const = 0;
    virtual std::string axis_name(std::size_t axis) const = 0;

    // Allowed codes one step up (+1) or down (-1) along an axis, never `from` itself; empty where
    // there are none. A step that would leave the range ends at its end; one onto a forbidden
    // combination ends short of it.
    virtual std::optional<Codes> step(const Codes& from, std::size_t axis, int direction,
                                      std::size_t level) const = 0;
};

// Each dimension with more than one code is an axis.
std::unique_ptr<Moves> make_code_moves(const CodeSpace& space);

// Each pair of dimensions with more than one code, stepped together: both up or down, and one up
// while the other goes down. Axes of the latter kind come first.
std::unique_ptr<Moves> make_pair_moves(const CodeSpace& space);

// Along dc attenuation, high-frequency attenuation, zero and impedance level of the equalizer, to
// the codes nearest to the wanted response; other dimensions by their codes. Null where the space
// lacks one of the four parts or its table.
std::unique_ptr<Moves> make_response_moves(const CodeSpace& space);

}  // namespace lanewright
