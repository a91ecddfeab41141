#pragma once
// Purpose:   numbers in sentences for people, the same in every locale.
// Ownership: pure functions on values.
// Threads:   any.

#include <string>

#include "adapt/search/code_space.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

// With that many digits after the point.
std::string fixed(double value, int digits);

// With that many significant digits, as short as they allow.
std::string general(double value, int digits);

// "r1=9 r2=15 c1=15 c2=0"
std::string text_of(const CodeSpace& space, const Codes& codes);

}  // namespace lanewright
