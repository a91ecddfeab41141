#pragma once
// Purpose:   the bench's store, open for writing: one process, one connection, one thread that
//            alone commits and alone checkpoints.
// Ownership: owns the file's lock, the connection and the thread.
// Threads:   append and add_run on the io thread; the rest of its work on its own thread. Events
//            that are ready together share one commit.
// Errors:    Cause::busy names the pid of the other writer; Cause::io.
//
// Why one connection: up to SQLite 3.51.2 a commit that races a checkpoint from another connection
// can lose pages (sqlite.org/wal.html, section 11); with one connection there is no such race.

#include <memory>
#include <mutex>
#include <string>
#include <vector>

#include "daemon/store/database.hpp"
#include "daemon/store/file_lock.hpp"
#include "daemon/store/journal.hpp"
#include "drivers/io/workers.hpp"

namespace lanewright {

class Store : public Journal {
  public:
    static Result<std::unique_ptr<Store>> open(const std::string& path, TimeSource& time);
    ~Store() override;

    const std::string& path() const { return path_; }
    // The pid of the process that has the store open for writing; 0: none.
    static std::int64_t holder(const std::string& path) { return lock_holder(lock_of(path)); }

    Task<void> add_run(Manifest manifest);
    Task<std::vector<StoredEvent>> append(RunId run, std::vector<Event> events) override;

    // What stands in the store; only before runs start or after they ended.
    std::vector<RunRow> runs() const { return database_->runs(); }
    RunRow find_run(const std::string& id) const { return database_->find_run(id); }
    std::vector<StoredEvent> events(const RunId& run) const;
    std::vector<PreflightItem> preflight_items(const RunId& run) const {
        return database_->preflight_items(run);
    }

  private:
    static std::string lock_of(const std::string& path) { return path + ".lock"; }
    struct Pending;
    Store(std::string path, FileLock lock, std::unique_ptr<Database> database, TimeSource& time);
    void commit_pending();

    std::string path_;
    FileLock lock_;
    std::unique_ptr<Database> database_;
    std::mutex mutex_;  // guards pending_
    std::vector<std::shared_ptr<Pending>> pending_;
    Workers thread_;  // last: it must stop before the rest goes
};

// Whole runs are read in pages of this many events.
std::vector<StoredEvent> all_events(const Database& database, const RunId& run);

}  // namespace lanewright
