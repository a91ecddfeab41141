#pragma once
// Purpose:   where a run's events go before anything else happens with them.
// Ownership: an implementation owns its file.
// Threads:   called on the io thread.
// Errors:    Cause::io with the store's path and what to do.

#include <cstddef>
#include <vector>

#include "daemon/store/events.hpp"
#include "drivers/io/task.hpp"

namespace lanewright {

class Journal {
  public:
    virtual ~Journal() = default;

    // Resumes when the events are durable, all or none; returns them as stored, in order.
    virtual Task<std::vector<StoredEvent>> append(RunId run, std::vector<Event> events) = 0;
};

// Told of every event once it is durable; on the io thread, and never waits.
class Observer {
  public:
    virtual ~Observer() = default;
    virtual void on_event(const StoredEvent& event) noexcept = 0;
};

}  // namespace lanewright
