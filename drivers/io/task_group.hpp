#pragma once
// Purpose:   tasks that run beside each other, with one place that stops and joins them; nothing
//            is detached silently.
// Ownership: holds its tasks' fate, not their data: what a task refers to must outlive join().
// Threads:   io thread.

#include <boost/asio/awaitable.hpp>
#include <boost/asio/io_context.hpp>
#include <memory>
#include <string>
#include <vector>

#include "drivers/io/signal.hpp"
#include "drivers/io/task.hpp"

namespace lanewright {

class TaskGroup {
  public:
    explicit TaskGroup(boost::asio::io_context& io);
    TaskGroup(boost::asio::io_context& io, const Stop& parent);  // stopped with its parent
    // With a task still running: std::terminate, as std::thread does, unless an exception is
    // already on its way (the loop has been left then, and no task can run any more).
    ~TaskGroup();
    TaskGroup(const TaskGroup&) = delete;
    TaskGroup& operator=(const TaskGroup&) = delete;

    // Starts the task at the next turn of the loop. An exception becomes Cause::internal with
    // the task's name.
    void spawn(std::string name, Task<void> task);

    // Asks all tasks to end; they see it in stopping() and in waits bound to stop_of_tasks().
    void stop();
    bool stopping() const;
    Stop stop_of_tasks() const;

    // Waits, without a deadline, until every task has ended. Fails with the first fault of a
    // task in order of time; Cause::stopped counts only where no other fault was seen. The group
    // can be used again afterwards.
    Task<void> join();

    std::vector<std::string> running() const;  // names, for a message

  private:
    struct State;
    std::shared_ptr<State> state_;
};

}  // namespace lanewright
