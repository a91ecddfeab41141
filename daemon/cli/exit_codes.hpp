#pragma once
// Purpose:   what the shell learns: 0 and 1 for runs, else sysexits.h.
// Ownership: none. Threads: no shared state.

#include "drivers/faults/fault.hpp"

namespace lanewright {

enum ExitCode : int {
    exit_ok = 0,            // all lanes meet
    exit_not_all_meet = 1,  // the run finished, some lanes don't
    exit_usage = 64,
    exit_bad_data = 65,
    exit_unreachable = 69,
    exit_internal = 70,
    exit_io = 74,
    exit_try_again = 75,
    exit_not_fit = 76,  // an item of the preflight failed: nothing was searched
    exit_no_permission = 77,
    exit_config = 78
};

ExitCode exit_code_of(Cause cause);

}  // namespace lanewright
