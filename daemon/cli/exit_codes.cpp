#include "daemon/cli/exit_codes.hpp"

namespace lanewright {

ExitCode exit_code_of(Cause cause) {
    switch (cause) {
        case Cause::none:
            return exit_ok;
        case Cause::unreachable:
        case Cause::timeout:
        case Cause::outcome_unknown:
        case Cause::board_reset:
        case Cause::refused:
        case Cause::not_accepted:
        case Cause::codes_changed:
        case Cause::wait_expired:
            return exit_unreachable;
        case Cause::busy:
        case Cause::stopped:
            return exit_try_again;
        case Cause::not_fit:
            return exit_not_fit;
        case Cause::wrong_board:
        case Cause::not_allowed:
        case Cause::bad_config:
            return exit_config;
        case Cause::no_permission:
            return exit_no_permission;
        case Cause::io:
            return exit_io;
        case Cause::bad_data:
        case Cause::diverged:
            return exit_bad_data;
        case Cause::internal:
            break;
    }
    return exit_internal;
}

}  // namespace lanewright
