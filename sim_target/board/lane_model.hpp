#pragma once
// Purpose:   what the register file needs to know of a lane's physics, and nothing more.
// Ownership: owned by the chip; an implementation owns its tables.
// Threads:   const calls from any thread.

#include <cstdint>
#include <memory>
#include <vector>

#include "sim_target/physics/truth.hpp"
#include "sim_target/target_file.hpp"

namespace lanewright::sim {

class LaneModel {
  public:
    virtual ~LaneModel() = default;
    // Codes in the order r1, c1, r2, c2. error_ratio 0: the monitor's own.
    virtual LatchedEdges latch(const std::vector<int>& codes, double error_ratio,
                               std::uint64_t dwell_bits, std::uint64_t ordinal) const = 0;
    virtual bool locks(const std::vector<int>& codes) const = 0;
};

// One model a lane, from the oracle. Notes about channels go to stderr.
std::vector<std::unique_ptr<LaneModel>> make_lane_models(const TargetFile& target);

}  // namespace lanewright::sim
