#pragma once
// Purpose:   the store's file: one SQLite database with its schema, read and written synchronously.
//            README.md beside this file describes the format and its version rule.
// Ownership: owns its connection.
// Threads:   one thread at a time per object. At most one read-write object a file (Store sees to
//            that); any number of read-only ones.
// Errors:    StoreError, with the file's path and what to do.

#include <cstddef>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "daemon/store/events.hpp"
#include "daemon/store/manifest.hpp"

namespace SQLite {
class Database;
}

namespace lanewright {

struct NewEvent {
    RunId run;
    std::int64_t at_ns = 0;
    Event event;
    EventSeq seq = 0;  // filled in by append
};

struct RunRow {
    RunId id;
    Manifest manifest;
};

class Database {
  public:
    enum class Mode { read_write, read_only };

    // read_write creates the file and its folders, or checks version and health of what is there.
    Database(const std::string& path, Mode mode);
    ~Database();
    Database(const Database&) = delete;
    Database& operator=(const Database&) = delete;

    const std::string& path() const { return path_; }

    void add_run(const Manifest& manifest);             // durable on return
    void append(const std::vector<NewEvent*>& events);  // one transaction, durable on return
    std::vector<RunRow> runs() const;                   // oldest first
    // A whole id, a prefix of just one id, or "latest". StoreError says which runs there are.
    RunRow find_run(const std::string& id_or_prefix) const;
    std::vector<StoredEvent> events(const RunId& run, EventSeq after, std::size_t at_most) const;
    // What the run's preflight concluded, in order; without its readings.
    std::vector<PreflightItem> preflight_items(const RunId& run) const;
    void checkpoint();

  private:
    std::string path_;
    std::unique_ptr<SQLite::Database> db_;
};

// Makes the store's folder; StoreError if that fails or if it lies on a network file system.
void prepare_store_folder(const std::string& path);

// $XDG_STATE_HOME/lanewright/store.db, or ~/.local/state/lanewright/store.db.
std::string default_store_path();
// $XDG_STATE_HOME/lanewright, or ~/.local/state/lanewright.
std::string state_directory();

}  // namespace lanewright
