#pragma once
// Purpose:   two ends joined in memory, for tests: with virtual time, hours of bench in seconds.
// Ownership: the ends share their state; either may go first.
// Threads:   io thread.

#include <chrono>
#include <functional>
#include <memory>
#include <string>
#include <utility>
#include <vector>

#include "drivers/io/link.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright {

// What becomes of the bytes of one write: each piece arrives after its own extra delay.
struct MemoryPiece {
    Bytes bytes;
    std::chrono::nanoseconds delay{};
};
using MemoryHook = std::function<std::vector<MemoryPiece>(Bytes)>;

struct MemoryOptions {
    std::string name = "memory";
    std::chrono::nanoseconds latency{};  // each way
    double bytes_per_s = 0;              // each way; 0: not limited
    AfterDeadline after_deadline = AfterDeadline::drain;
};

// The cable between the ends, for tests to tamper with. Lives as long as either end.
class MemoryCable {
  public:
    virtual ~MemoryCable() = default;
    virtual void on_host_writes(MemoryHook hook) = 0;  // empty: bytes pass as they are
    virtual void on_board_writes(MemoryHook hook) = 0;
    virtual void cut() = 0;     // both ends lose the link; bytes on the way are lost
    virtual void unplug() = 0;  // cut, and open() fails until plugged in
    virtual void plug_in() = 0;
};

struct MemoryPair {
    std::unique_ptr<Link> host, board;
    std::shared_ptr<MemoryCable> cable;
};

// The board end counts as open from the start and again after each cut; bytes written while the
// host end is closed are lost.
MemoryPair make_memory_pair(TimeSource& time, MemoryOptions options = {});

}  // namespace lanewright
