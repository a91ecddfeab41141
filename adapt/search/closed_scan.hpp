#pragma once
// Purpose:   where to look when the present codes show a closed eye. A monitor that latches reads 0
//            there and gives no slope to descend along, so codes spread evenly over the space are
//            read until one of them opens.
// Ownership: pure function on values.
// Threads:   any.

#include <cstddef>
#include <string>
#include <vector>

#include "adapt/search/code_space.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

// At most `count` different allowed codes, none equal to `present`, the same on every call:
// Halton's sequence (Numer. Math. 2, 84-90, 1960) over the ranges of the dimensions. Where the
// tables are known, codes that peak come before those that don't: a channel closes an eye by loss
// that rises with frequency, and only peaking opens it. A space of few codes is listed whole, in
// that order.
std::vector<Codes> closed_scan(const CodeSpace& space, const Codes& present, std::size_t count);

// A sentence on a scan, of which `count` codes were read; `closed` says where the eye was closed.
std::string scan_note(const std::string& closed, std::ptrdiff_t count);

// The allowed codes closest to these (sum of the distances in shares of each range), which may be
// outside the ranges or forbidden; empty codes where nothing allowed is found among 2^22 codes.
Codes nearest_allowed(const CodeSpace& space, const Codes& codes);

}  // namespace lanewright
