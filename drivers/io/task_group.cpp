#include "drivers/io/task_group.hpp"

#include <boost/asio/as_tuple.hpp>
#include <boost/asio/co_spawn.hpp>
#include <boost/asio/steady_timer.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <cstdio>
#include <exception>
#include <map>
#include <optional>

namespace lanewright {

namespace asio = boost::asio;

struct TaskGroup::State {
    State(asio::io_context& loop, Stop its_stop)
        : io(loop), stop(std::move(its_stop)), ended(loop) {}
    asio::io_context& io;
    Stop stop;
    asio::steady_timer ended;  // an event that its cancellation sets
    std::map<std::uint64_t, std::string> running;
    std::uint64_t next = 0;
    std::optional<Fault> first;

    void keep(Fault fault) {
        const bool better =
            !first || (first->cause == Cause::stopped && fault.cause != Cause::stopped);
        if (better) first = std::move(fault);
    }

    void finished(std::uint64_t id, const std::exception_ptr& thrown, const Result<void>& result) {
        if (thrown) {
            keep(fault_of(thrown, running.at(id)));
        } else if (result.has_error()) {
            keep(result.error());
        }
        running.erase(id);
        if (running.empty()) ended.cancel();
    }

    static Fault fault_of(const std::exception_ptr& thrown, const std::string& name) {
        Fault fault;
        fault.cause = Cause::internal;
        try {
            std::rethrow_exception(thrown);
        } catch (const FaultError& error) {
            return error.fault();
        } catch (const std::exception& error) {
            fault.what = "task " + name + ": " + error.what();
        } catch (...) {
            fault.what = "task " + name + ": an exception of unknown type";
        }
        return fault;
    }
};

TaskGroup::TaskGroup(asio::io_context& io) : state_(std::make_shared<State>(io, Stop(io))) {}

TaskGroup::TaskGroup(asio::io_context& io, const Stop& parent)
    : state_(std::make_shared<State>(io, parent.child())) {}

TaskGroup::~TaskGroup() {
    if (state_->running.empty() || std::uncaught_exceptions() > 0) return;
    for (const auto& [id, name] : state_->running) {
        std::fprintf(stderr, "task group destroyed before its task '%s' ended\n", name.c_str());
    }
    std::terminate();
}

void TaskGroup::spawn(std::string name, Task<void> task) {
    const std::uint64_t id = state_->next++;
    state_->running.emplace(id, std::move(name));
    asio::co_spawn(
        state_->io, std::move(task),
        [state = state_, id](const std::exception_ptr& thrown, const Result<void>& result) {
            state->finished(id, thrown, result);
        });
}

void TaskGroup::stop() {
    state_->stop.request();
}

bool TaskGroup::stopping() const {
    return state_->stop.requested();
}

Stop TaskGroup::stop_of_tasks() const {
    return state_->stop;
}

Task<void> TaskGroup::join() {
    const auto state = state_;
    while (!state->running.empty()) {
        state->ended.expires_at(asio::steady_timer::time_point::max());
        co_await state->ended.async_wait(asio::as_tuple(asio::use_awaitable));
    }
    auto first = std::exchange(state->first, std::nullopt);
    if (first) co_return *first;
    co_return Result<void>{};
}

std::vector<std::string> TaskGroup::running() const {
    std::vector<std::string> names;
    for (const auto& [id, name] : state_->running) names.push_back(name);
    return names;
}

}  // namespace lanewright
