#pragma once
// Purpose:   for tests: how long any handler held the io thread.
// Ownership: a thread of its own while it lives; the loop must go on running meanwhile, and the
//            object goes before the io_context.
// Threads:   made and read on any one thread.

#include <boost/asio/io_context.hpp>
#include <chrono>
#include <memory>

namespace lanewright {

class LoopWatch {
  public:
    explicit LoopWatch(boost::asio::io_context& io);
    ~LoopWatch();
    LoopWatch(const LoopWatch&) = delete;
    LoopWatch& operator=(const LoopWatch&) = delete;

    // Longest processor time that the io thread used between two probes a fraction of a
    // millisecond apart: an upper limit for one handler, not disturbed by other processes.
    std::chrono::nanoseconds longest_busy() const;
    // Longest time that a probe had to wait for the io thread; also sees blocking calls, and
    // also a machine that is busy with something else.
    std::chrono::nanoseconds longest_delay() const;

  private:
    struct State;
    std::shared_ptr<State> state_;
};

}  // namespace lanewright
