#pragma once
// Purpose:   whether the monitor measures at all: half errors far outside the eye, as many bits as
//            were asked for, errors that rise from the centre outwards; of a latching monitor what
//            a latch can show, that an eye is not smaller at a higher error ratio.
// Ownership: as Probe.
// Threads:   as Probe.

#include <memory>

#include "daemon/engine/preflight_probe.hpp"

namespace lanewright {

std::unique_ptr<Probe> make_monitor_probe(const ProbeInput& input);

}  // namespace lanewright
