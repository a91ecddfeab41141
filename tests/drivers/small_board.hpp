#pragma once
// Purpose:   a small board file made in code, for tests: two tuned dimensions a lane, a latched
//            monitor or a counted one, every role and access once.
// Ownership: values only.
// Threads:   none.

#include "drivers/config/board_file.hpp"

namespace lanewright::test {

// Addresses of lane 0 as the small board has them; lane 1 is 0x40 further on.
enum SmallAddress : std::uint32_t {
    at_id = 0x0,
    at_scratch = 0x4,
    at_codes = 0x100,
    at_load = 0x101,
    at_control = 0x102,
    at_status = 0x103,
    at_note = 0x104,
    at_setup = 0x105,
    at_go = 0x106,
    at_monitor = 0x107,
    at_up = 0x108,
    at_key = 0x10C,
    // Of the counted monitor.
    at_heat = 0x6,
    at_guard = 0x8,
    at_point = 0x10D,
    at_count = 0x10E,
    at_errors = 0x10F,
    at_bits = 0x110,
    at_origin = 0x111,
    at_tag = 0x112
};

BoardFile small_board();

// The same chip, told where to look: 2 mV and 1/64 UI a step, counter up to 2^24 - 1.
BoardFile small_counted_board();

}  // namespace lanewright::test
