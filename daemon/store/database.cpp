#include "daemon/store/database.hpp"

#include <SQLiteCpp/SQLiteCpp.h>
#include <fcntl.h>
#include <sqlite3.h>
#include <sys/vfs.h>
#include <unistd.h>

#include <array>
#include <cstdlib>
#include <filesystem>
#include <nlohmann/json.hpp>

#include "daemon/store/store_error.hpp"
#include "daemon/store/value_json.hpp"

namespace lanewright {

namespace fs = std::filesystem;
using nlohmann::json;

namespace {

constexpr int application_id = 0x4C4E5752;  // "LNWR"
constexpr int schema_version = 2;

constexpr const char* schema = R"sql(
CREATE TABLE runs (
    id TEXT PRIMARY KEY,
    started_ns INTEGER NOT NULL,
    manifest TEXT NOT NULL
) STRICT;
CREATE TABLE events (
    seq INTEGER PRIMARY KEY,
    run TEXT NOT NULL REFERENCES runs(id),
    lane INTEGER,
    kind TEXT NOT NULL,
    at_ns INTEGER NOT NULL,
    body TEXT NOT NULL
) STRICT;
CREATE INDEX events_by_run ON events(run, seq);
CREATE TABLE readings (
    event INTEGER PRIMARY KEY REFERENCES events(seq),
    run TEXT NOT NULL,
    lane INTEGER NOT NULL,
    ordinal INTEGER NOT NULL,
    attempt INTEGER NOT NULL,
    codes TEXT NOT NULL,
    condition INTEGER NOT NULL,
    status TEXT NOT NULL,
    up_mv REAL, up_se_mv REAL, up_bound INTEGER,
    down_mv REAL, down_se_mv REAL, down_bound INTEGER,
    left_ui REAL, left_se_ui REAL, left_bound INTEGER,
    right_ui REAL, right_se_ui REAL, right_bound INTEGER,
    height_mv REAL, height_se_mv REAL, height_bound INTEGER,
    width_ui REAL, width_se_ui REAL, width_bound INTEGER,
    centred_assumed INTEGER NOT NULL,
    basis TEXT NOT NULL,
    error_definition TEXT NOT NULL,
    error_ratio REAL NOT NULL,
    centre_error_ratio REAL,
    bit_count INTEGER NOT NULL,
    cost_s REAL NOT NULL,
    counts TEXT NOT NULL,
    wire TEXT NOT NULL,
    slopes TEXT NOT NULL DEFAULT 'null',
    telemetry TEXT NOT NULL DEFAULT '[]',
    UNIQUE (run, lane, ordinal)
) STRICT;
)sql";

// From format 1: slopes and telemetry of a reading, and kinds of event that it did not know.
constexpr const char* from_format_1 = R"sql(
ALTER TABLE readings ADD COLUMN slopes TEXT NOT NULL DEFAULT 'null';
ALTER TABLE readings ADD COLUMN telemetry TEXT NOT NULL DEFAULT '[]';
)sql";

// f_type of file systems on which SQLite's locks cannot be relied upon (statfs(2), linux/magic.h).
bool is_network_file_system(long type) {
    constexpr std::array<unsigned long, 7> network{0x6969,     0x517B,     0xFF534D42, 0xFE534D42,
                                                   0x00C36400, 0x5346414F, 0x73757245};
    for (const unsigned long magic : network) {
        if (static_cast<unsigned long>(type) == magic) return true;
    }
    return false;
}

void refuse_network_file_system(const std::string& path) {
    struct statfs info{};
    const std::string folder = fs::absolute(path).parent_path().string();
    if (statfs(folder.c_str(), &info) == 0 && is_network_file_system(info.f_type)) {
        throw StoreError("the store " + path +
                         " lies on a network file system, where its locks are not reliable. "
                         "Choose a local path with --store");
    }
}

void make_parent(const std::string& path) {
    std::error_code error;
    fs::create_directories(fs::absolute(path).parent_path(), error);
    if (error) {
        throw StoreError("the folder of the store " + path + " cannot be made: " + error.message() +
                         ". Choose another path with --store");
    }
}

int pragma(SQLite::Database& db, const std::string& name) {
    return db.execAndGet("PRAGMA " + name).getInt();
}

void create_schema(SQLite::Database& db) {
    SQLite::Transaction transaction(db, SQLite::TransactionBehavior::IMMEDIATE);
    db.exec(schema);
    db.exec("PRAGMA application_id = " + std::to_string(application_id));
    db.exec("PRAGMA user_version = " + std::to_string(schema_version));
    transaction.commit();
}

// A whole copy beside the store, under a name that nothing has yet; durable on return.
void copy_before_migration(SQLite::Database& db, const std::string& path, int version) {
    std::string copy = path + ".format" + std::to_string(version);
    for (int n = 2; fs::exists(copy); ++n) {
        copy = path + ".format" + std::to_string(version) + "." + std::to_string(n);
    }
    SQLite::Statement vacuum(db, "VACUUM INTO ?");
    vacuum.bind(1, copy);
    vacuum.exec();
    const int file = ::open(copy.c_str(), O_RDONLY | O_CLOEXEC);
    const bool synced = file >= 0 && ::fsync(file) == 0;
    if (file >= 0) ::close(file);
    if (!synced) {
        throw StoreError("the store " + path + " has an older format and the copy " + copy +
                         " cannot be made durable before it is brought up to date. Check the disk");
    }
}

void migrate(SQLite::Database& db, const std::string& path, int version) {
    copy_before_migration(db, path, version);
    SQLite::Transaction transaction(db, SQLite::TransactionBehavior::IMMEDIATE);
    db.exec(from_format_1);
    db.exec("PRAGMA user_version = " + std::to_string(schema_version));
    transaction.commit();
}

void check_schema(SQLite::Database& db, const std::string& path, Database::Mode mode) {
    const int id = pragma(db, "application_id");
    const int version = pragma(db, "user_version");
    const bool empty = db.execAndGet("SELECT count(*) FROM sqlite_master").getInt() == 0;
    if (empty && mode == Database::Mode::read_write) return create_schema(db);
    if (empty || id != application_id) {
        throw BadStoreData(path +
                           " is not a store of this program. Choose another path with --store");
    }
    if (version > schema_version) {
        throw BadStoreData("the store " + path + " has format " + std::to_string(version) +
                           ", this version reads up to " + std::to_string(schema_version) +
                           ". Use a newer version of the program");
    }
    if (version < schema_version && mode == Database::Mode::read_write) migrate(db, path, version);
}

struct MeasuredColumns {
    std::optional<Measured> Reading::* member;
    int at;  // index of value; standard error and bound follow
};
constexpr std::array<MeasuredColumns, 6> measured_columns{{{&Reading::up_mv, 0},
                                                           {&Reading::down_mv, 3},
                                                           {&Reading::left_ui, 6},
                                                           {&Reading::right_ui, 9},
                                                           {&Reading::height_mv, 12},
                                                           {&Reading::width_ui, 15}}};

constexpr const char* insert_reading = R"sql(
INSERT INTO readings VALUES (?,?,?,?,?,?,?,?,
  ?,?,?, ?,?,?, ?,?,?, ?,?,?, ?,?,?, ?,?,?,
  ?,?,?,?,?,?,?,?,?,?,?)
)sql";

void bind_measured(SQLite::Statement& statement, int at, const std::optional<Measured>& measured) {
    if (!measured) return;  // unbound parameters are NULL
    statement.bind(at, measured->value);
    statement.bind(at + 1, measured->std_error);
    statement.bind(at + 2, static_cast<int>(measured->bound));
}

std::optional<Measured> measured_at(const SQLite::Statement& row, int at) {
    if (row.getColumn(at).isNull()) return std::nullopt;
    const int bound = row.getColumn(at + 2).getInt();
    if (bound < 0 || bound > 2) throw BadStoreData("a reading holds an unknown bound");
    return Measured{row.getColumn(at).getDouble(), row.getColumn(at + 1).getDouble(),
                    static_cast<Bound>(bound)};
}

void insert_reading_row(SQLite::Statement& statement, const NewEvent& added) {
    const auto& taken = std::get<ReadingTaken>(added.event);
    const Reading& reading = taken.reading;
    statement.reset();
    statement.clearBindings();
    statement.bind(1, static_cast<std::int64_t>(added.seq));
    statement.bind(2, added.run);
    statement.bind(3, static_cast<int>(number(taken.lane)));
    statement.bind(4, static_cast<std::int64_t>(taken.ordinal));
    statement.bind(5, static_cast<std::int64_t>(taken.attempt));
    statement.bind(6, to_json_value(reading.codes).dump());
    statement.bind(7, static_cast<int>(static_cast<std::uint16_t>(reading.condition)));
    statement.bind(8, name_of(reading.status));
    for (const auto& [member, at] : measured_columns) {
        bind_measured(statement, 9 + at, reading.*member);
    }
    statement.bind(27, reading.centred_assumed ? 1 : 0);
    statement.bind(28, name_of(reading.basis));
    statement.bind(29, name_of(reading.error_definition));
    statement.bind(30, reading.error_ratio);
    if (reading.centre_error_ratio) statement.bind(31, *reading.centre_error_ratio);
    statement.bind(32, static_cast<std::int64_t>(reading.bit_count));
    statement.bind(33, reading.cost_s);
    statement.bind(34, to_json_value(reading.counts).dump());
    statement.bind(35, to_json_value(taken.wire).dump());
    statement.bind(36, to_json_value(reading.slopes).dump());
    statement.bind(37, to_json_value(reading.telemetry).dump());
    statement.exec();
}

// Columns of readings from `codes` on, joined behind seq, at_ns, kind, body. A store of format 1 is
// read as it is where it may not be written to.
constexpr const char* select_events = R"sql(
SELECT e.seq, e.at_ns, e.kind, e.body, r.codes, r.condition, r.status,
  r.up_mv, r.up_se_mv, r.up_bound, r.down_mv, r.down_se_mv, r.down_bound,
  r.left_ui, r.left_se_ui, r.left_bound, r.right_ui, r.right_se_ui, r.right_bound,
  r.height_mv, r.height_se_mv, r.height_bound, r.width_ui, r.width_se_ui, r.width_bound,
  r.centred_assumed, r.basis, r.error_definition, r.error_ratio, r.centre_error_ratio,
  r.bit_count, r.cost_s, r.counts, r.wire)sql";
constexpr const char* select_columns_of_format_2 = ", r.slopes, r.telemetry";
constexpr const char* select_where = R"sql(
FROM events e LEFT JOIN readings r ON r.event = e.seq
WHERE e.run = ? AND e.seq > ? ORDER BY e.seq LIMIT ?
)sql";

void fill_reading(const SQLite::Statement& row, ReadingTaken& taken) {
    Reading& reading = taken.reading;
    reading.codes = codes_from(json::parse(row.getColumn(4).getString()));
    reading.condition = Condition{static_cast<std::uint16_t>(row.getColumn(5).getInt())};
    reading.status = status_from(row.getColumn(6).getString());
    for (const auto& [member, at] : measured_columns) reading.*member = measured_at(row, 7 + at);
    reading.centred_assumed = row.getColumn(25).getInt() != 0;
    reading.basis = basis_from(row.getColumn(26).getString());
    reading.error_definition = error_definition_from(row.getColumn(27).getString());
    reading.error_ratio = row.getColumn(28).getDouble();
    if (!row.getColumn(29).isNull()) reading.centre_error_ratio = row.getColumn(29).getDouble();
    reading.bit_count = static_cast<std::uint64_t>(row.getColumn(30).getInt64());
    reading.cost_s = row.getColumn(31).getDouble();
    reading.counts = counts_from(json::parse(row.getColumn(32).getString()));
    taken.wire = wire_from(json::parse(row.getColumn(33).getString()));
    if (row.getColumnCount() <= 34) return;
    reading.slopes = slopes_from(json::parse(row.getColumn(34).getString()));
    reading.telemetry = telemetry_from(json::parse(row.getColumn(35).getString()));
}

[[noreturn]] void rethrow(const std::string& path, const SQLite::Exception& error) {
    std::string hint;
    switch (error.getErrorCode()) {
        case SQLITE_FULL:
            hint = ". The disk is full: make room, then start the run again";
            break;
        case SQLITE_CANTOPEN:
            hint = ". Check the path and its permissions";
            break;
        case SQLITE_READONLY:
            hint = ". The file or its folder cannot be written";
            break;
        case SQLITE_NOTADB:
            hint = ". Choose another path with --store";
            break;
        case SQLITE_CORRUPT:
            hint = ". Keep the file for recovery and start a new store";
            break;
        default:
            break;
    }
    const bool damaged =
        error.getErrorCode() == SQLITE_NOTADB || error.getErrorCode() == SQLITE_CORRUPT;
    const std::string general = error.getErrorStr(), particular = error.what();
    throw StoreError("the store " + path + ": " + general +
                         (particular == general ? "" : " (" + particular + ")") + hint,
                     damaged ? Cause::bad_data : Cause::io);
}

}  // namespace

void prepare_store_folder(const std::string& path) {
    make_parent(path);
    refuse_network_file_system(path);
}

Database::Database(const std::string& path, Mode mode) : path_(path) {
    if (mode == Mode::read_write) {
        prepare_store_folder(path);
    } else if (!fs::exists(path)) {
        throw StoreError("there is no store " + path +
                         ". Name one with --store, or make one with `lanewright tune`");
    }
    const int flags = mode == Mode::read_write ? SQLite::OPEN_READWRITE | SQLite::OPEN_CREATE
                                               : SQLite::OPEN_READONLY;
    try {
        db_ = std::make_unique<SQLite::Database>(path, flags, 2000);
        if (mode == Mode::read_write) {
            db_->exec("PRAGMA journal_mode = WAL");
            db_->exec("PRAGMA synchronous = FULL");
            db_->exec("PRAGMA foreign_keys = ON");
            db_->exec("PRAGMA journal_size_limit = 67108864");
        } else {
            db_->exec("PRAGMA query_only = ON");
        }
        db_->exec("PRAGMA mmap_size = 0");
        check_schema(*db_, path, mode);
    } catch (const SQLite::Exception& error) {
        rethrow(path, error);
    }
}

Database::~Database() = default;

void Database::add_run(const Manifest& manifest) {
    try {
        SQLite::Transaction transaction(*db_, SQLite::TransactionBehavior::IMMEDIATE);
        SQLite::Statement insert(*db_, "INSERT INTO runs VALUES (?,?,?)");
        insert.bind(1, manifest.run);
        insert.bind(2, manifest.started_ns);
        insert.bind(3, encode_manifest(manifest));
        insert.exec();
        transaction.commit();
    } catch (const SQLite::Exception& error) {
        rethrow(path_, error);
    }
}

void Database::append(const std::vector<NewEvent*>& events) {
    try {
        SQLite::Transaction transaction(*db_, SQLite::TransactionBehavior::IMMEDIATE);
        SQLite::Statement insert(
            *db_, "INSERT INTO events (run, lane, kind, at_ns, body) VALUES (?,?,?,?,?)");
        SQLite::Statement reading(*db_, insert_reading);
        for (NewEvent* added : events) {
            insert.reset();
            insert.clearBindings();
            insert.bind(1, added->run);
            if (const auto lane = lane_of(added->event)) {
                insert.bind(2, static_cast<int>(number(*lane)));
            }
            insert.bind(3, kind_of(added->event));
            insert.bind(4, added->at_ns);
            insert.bind(5, encode_body(added->event));
            insert.exec();
            added->seq = db_->getLastInsertRowid();
            if (std::holds_alternative<ReadingTaken>(added->event)) {
                insert_reading_row(reading, *added);
            }
        }
        transaction.commit();
    } catch (const SQLite::Exception& error) {
        rethrow(path_, error);
    }
}

std::vector<RunRow> Database::runs() const {
    try {
        std::vector<RunRow> out;
        SQLite::Statement query(*db_, "SELECT id, manifest FROM runs ORDER BY started_ns, id");
        while (query.executeStep()) {
            out.push_back(
                {query.getColumn(0).getString(), decode_manifest(query.getColumn(1).getString())});
        }
        return out;
    } catch (const SQLite::Exception& error) {
        rethrow(path_, error);
    }
}

RunRow Database::find_run(const std::string& id_or_prefix) const {
    const std::vector<RunRow> all = runs();
    if (all.empty()) throw NoSuchRun("the store " + path_ + " holds no run yet");
    if (id_or_prefix == "latest") return all.back();
    std::vector<const RunRow*> found;
    for (const RunRow& row : all) {
        if (row.id == id_or_prefix) return row;
        if (!id_or_prefix.empty() && row.id.starts_with(id_or_prefix)) found.push_back(&row);
    }
    if (found.size() == 1) return *found.front();
    throw NoSuchRun((found.empty() ? "there is no run \"" : "more than one run begins with \"") +
                    id_or_prefix + "\" in " + path_ + "; the newest is " + all.back().id +
                    ". `lanewright runs` lists them");
}

std::vector<StoredEvent> Database::events(const RunId& run, EventSeq after,
                                          std::size_t at_most) const {
    try {
        std::vector<StoredEvent> out;
        const bool format_1 = pragma(*db_, "user_version") == 1;
        SQLite::Statement query(*db_, std::string(select_events) +
                                          (format_1 ? "" : select_columns_of_format_2) +
                                          select_where);
        query.bind(1, run);
        query.bind(2, after);
        query.bind(3, static_cast<std::int64_t>(at_most));
        while (query.executeStep()) {
            StoredEvent stored;
            stored.seq = query.getColumn(0).getInt64();
            stored.run = run;
            stored.at_ns = query.getColumn(1).getInt64();
            stored.event =
                decode_body(query.getColumn(2).getString(), query.getColumn(3).getString());
            if (auto* taken = std::get_if<ReadingTaken>(&stored.event)) {
                if (query.getColumn(4).isNull()) {
                    throw BadStoreData("the store " + path_ + " holds a reading without its row");
                }
                fill_reading(query, *taken);
            }
            out.push_back(std::move(stored));
        }
        return out;
    } catch (const SQLite::Exception& error) {
        rethrow(path_, error);
    } catch (const json::exception& error) {
        throw BadStoreData("the store " + path_ + " holds a damaged reading: " + error.what());
    }
}

std::vector<PreflightItem> Database::preflight_items(const RunId& run) const {
    try {
        std::vector<PreflightItem> out;
        SQLite::Statement query(*db_,
                                "SELECT kind, body FROM events WHERE run = ? AND kind = ? "
                                "ORDER BY seq");
        query.bind(1, run);
        query.bind(2, kind_of(PreflightItem{}));
        while (query.executeStep()) {
            Event event =
                decode_body(query.getColumn(0).getString(), query.getColumn(1).getString());
            out.push_back(std::move(std::get<PreflightItem>(event)));
        }
        return out;
    } catch (const SQLite::Exception& error) {
        rethrow(path_, error);
    }
}

void Database::checkpoint() {
    sqlite3_wal_checkpoint_v2(db_->getHandle(), nullptr, SQLITE_CHECKPOINT_TRUNCATE, nullptr,
                              nullptr);
}

std::string state_directory() {
    if (const char* state = std::getenv("XDG_STATE_HOME"); state != nullptr && *state == '/') {
        return std::string(state) + "/lanewright";
    }
    if (const char* home = std::getenv("HOME"); home != nullptr && *home == '/') {
        return std::string(home) + "/.local/state/lanewright";
    }
    return "/var/lib/lanewright";
}

std::string default_store_path() {
    return state_directory() + "/store.db";
}

}  // namespace lanewright
