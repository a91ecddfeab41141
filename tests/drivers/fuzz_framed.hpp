#pragma once
// Purpose:   the framed dialect's fuzz entry point: any bytes, as a script of what a board and a
//            link may do to the host.
// Ownership: none.
// Threads:   any.

#include <cstdint>
#include <span>

namespace lanewright::test {

// Throws std::runtime_error where the dialect breaks a promise: a ticket finished twice or never
// submitted, a frame sent that does not decode, an unrepeatable batch sent under two names.
void fuzz_framed(std::span<const std::uint8_t> script);

}  // namespace lanewright::test
