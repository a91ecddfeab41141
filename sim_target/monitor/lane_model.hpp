#pragma once
// Purpose:   what the chip needs to know of a lane's physics, and nothing more.
// Ownership: owned by the chip; an implementation owns its tables and what it remembers.
// Threads:   one at a time.

#include <cstdint>
#include <memory>
#include <vector>

#include "sim_target/target_file.hpp"

namespace lanewright::sim {

// What a latched reading shows, in its steps from the data sampler's decision point. Closed: all
// zero.
struct LatchedEdges {
    int up = 0, down = 0, left = 0, right = 0;
    bool closed = false;
};

struct CountedErrors {
    std::uint64_t errors = 0;
    unsigned bits_log2 = 0;  // of the bits really counted
};

struct MonitorPoint {
    int offset = 0, phase = 0;  // in steps from the monitor's centre
};

// The circumstances of a look that are not the lane's own.
struct LookTime {
    double since_strobe_s = 1e9;
    bool in_parallel = false;  // another lane's monitor was at work meanwhile
    bool has_lock = true;      // the receiver, as far as time goes; without it half are errors
};

class LaneModel {
  public:
    virtual ~LaneModel() = default;
    // The number of the reading that comes next, or that begins anew. `beside`: it is none of a
    // run's own, and nothing of the run may follow from it.
    virtual void number(std::uint64_t ordinal, bool beside) = 0;
    // Codes, in the order r1, c1, r2, c2, take effect. True where the receiver has lock with them.
    virtual bool put(const std::vector<int>& codes, bool loops_held) = 0;
    // The chip was reset to these codes: as put(), but no reading follows from it.
    virtual bool fall_back(const std::vector<int>& codes) = 0;
    // error_ratio 0: the monitor's own.
    virtual LatchedEdges latch(const LookTime& time, double error_ratio, std::uint64_t bits) = 0;
    virtual CountedErrors count(const LookTime& time, const MonitorPoint& point,
                                unsigned bits_log2) = 0;
    // The data sampler's decision point, as the chip's own alignment finds it.
    virtual MonitorPoint origin() const = 0;
};

// One model a lane; lanes that are swapped have each other's. Notes about channels go to stderr.
std::vector<std::unique_ptr<LaneModel>> make_lane_models(const TargetFile& target);

}  // namespace lanewright::sim
