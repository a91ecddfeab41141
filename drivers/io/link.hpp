#pragma once
// Purpose:   a link moves bytes; it knows nothing of what they mean.
// Ownership: owned by whoever opens it; it owns its socket or file.
// Threads:   io thread. At most one read and one write at a time.

#include <chrono>
#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <vector>

#include "drivers/io/task.hpp"

namespace lanewright {

using Bytes = std::vector<std::byte>;

// What to do with a link after an answer did not come in time, so that a late answer is never
// taken for another's.
enum class AfterDeadline : std::uint8_t {
    drain,     // read and drop until it is quiet for `quiet`
    reconnect  // close and open anew
};

struct LinkTraits {
    std::string name;        // tcp:HOST:PORT, serial:PATH
    double bytes_per_s = 0;  // 0: not limited
    AfterDeadline after_deadline = AfterDeadline::drain;
    std::chrono::nanoseconds quiet = std::chrono::milliseconds(20);
    std::vector<std::string> warnings;  // of the last open(); for people
};

class Link {
  public:
    virtual ~Link() = default;

    // Opens, or opens anew after a loss. Fails with Cause::unreachable (nothing there, deadline
    // passed), busy (another process holds it; the text names its pid), no_permission or
    // bad_config.
    virtual Task<void> open(TimePoint deadline) = 0;

    // At least one byte, waiting without a deadline: only close() ends it early. Fails with
    // Cause::unreachable once the link is lost (end of file counts as lost); the link is closed
    // by then. The buffer must outlive the call.
    virtual Task<std::size_t> read_some(std::span<std::byte> buffer) = 0;

    // All bytes, or Cause::unreachable; a link that takes no bytes for some seconds is lost too.
    virtual Task<void> write(Bytes bytes) = 0;

    // Ends a read or write that is going on (they fail with Cause::unreachable). Safe when closed.
    virtual void close() noexcept = 0;

    virtual bool is_open() const = 0;
    virtual const LinkTraits& traits() const = 0;
};

}  // namespace lanewright
