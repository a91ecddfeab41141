#include "daemon/store/store.hpp"

#include <optional>
#include <utility>

#include "daemon/store/store_error.hpp"

namespace lanewright {

namespace {

Fault io_fault(const std::string& what) {
    Fault fault;
    fault.cause = Cause::io;
    fault.what = what;
    return fault;
}

}  // namespace

// One append that waits for its commit.
struct Store::Pending {
    std::vector<NewEvent> events;
    bool done = false;
    std::string error;
};

Store::Store(std::string path, FileLock lock, std::unique_ptr<Database> database, TimeSource& time)
    : path_(std::move(path)),
      lock_(std::move(lock)),
      database_(std::move(database)),
      thread_(time, 1) {}

Store::~Store() = default;

Result<std::unique_ptr<Store>> Store::open(const std::string& path, TimeSource& time) {
    try {
        prepare_store_folder(path);
        auto lock = FileLock::take(lock_of(path), "the store " + path);
        if (!lock) return lock.error();
        if (auto described = lock->describe("store=" + path + "\n"); !described) {
            return described.error();
        }
        auto database = std::make_unique<Database>(path, Database::Mode::read_write);
        return std::unique_ptr<Store>(new Store(path, std::move(*lock), std::move(database), time));
    } catch (const StoreError& error) {
        return error.fault();
    }
}

std::vector<StoredEvent> all_events(const Database& database, const RunId& run) {
    constexpr std::size_t page = 2000;
    std::vector<StoredEvent> out;
    for (;;) {
        const EventSeq after = out.empty() ? 0 : out.back().seq;
        std::vector<StoredEvent> more = database.events(run, after, page);
        const bool last = more.size() < page;
        std::move(more.begin(), more.end(), std::back_inserter(out));
        if (last) return out;
    }
}

std::vector<StoredEvent> Store::events(const RunId& run) const {
    return all_events(*database_, run);
}

Task<void> Store::add_run(Manifest manifest) {
    auto job = [this, kept = std::move(manifest)]() -> std::string {
        try {
            database_->add_run(kept);
            return {};
        } catch (const StoreError& error) {
            return error.what();
        }
    };
    const std::string error = co_await compute(thread_, std::move(job));
    if (!error.empty()) co_return io_fault(error);
    co_return Result<void>{};
}

// On the store's thread. Commits everything that waits, so one fsync serves all lanes that are
// ready together; an append whose events an earlier call took along finds them done.
void Store::commit_pending() {
    std::vector<std::shared_ptr<Pending>> taken;
    {
        const std::lock_guard guard(mutex_);
        taken.swap(pending_);
    }
    if (taken.empty()) return;
    std::vector<NewEvent*> rows;
    for (const auto& pending : taken) {
        for (NewEvent& event : pending->events) rows.push_back(&event);
    }
    std::string failed;
    try {
        database_->append(rows);
    } catch (const StoreError& error) {
        failed = error.what();
    }
    for (const auto& pending : taken) {
        pending->done = true;
        pending->error = failed;
    }
}

Task<std::vector<StoredEvent>> Store::append(RunId run, std::vector<Event> events) {
    auto pending = std::make_shared<Pending>();
    const std::int64_t now = utc_now_ns();
    for (Event& event : events) pending->events.push_back({run, now, std::move(event), 0});
    {
        const std::lock_guard guard(mutex_);
        pending_.push_back(pending);
    }
    auto job = [this, pending]() -> std::string {
        if (!pending->done) commit_pending();
        return pending->error;
    };
    const std::string error = co_await compute(thread_, std::move(job));
    if (!error.empty()) co_return io_fault(error);
    std::vector<StoredEvent> stored;
    for (NewEvent& event : pending->events) {
        stored.push_back({event.seq, event.run, event.at_ns, std::move(event.event)});
    }
    co_return stored;
}

}  // namespace lanewright
