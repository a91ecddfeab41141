#include <SQLiteCpp/SQLiteCpp.h>
#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>

#include "daemon/store/store_error.hpp"
#include "drivers/io/task_group.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

Manifest small_manifest(const RunId& run) {
    Manifest manifest;
    manifest.run = run;
    manifest.started_ns = 1'700'000'000'123'456'789;
    manifest.zone = "+05:30";
    manifest.board = "tarn-1";
    manifest.lanes = {0, 3};
    manifest.waves = {{0, 3}};
    manifest.seed = 0xFFFFFFFFFFFFFFFFu;
    manifest.tags = {{"chip", "A\"7"}};
    manifest.identity.values = {{"serial", 12}};
    return manifest;
}

ReadingTaken full_reading(std::uint32_t ordinal) {
    ReadingTaken taken;
    taken.lane = Lane{3};
    taken.ordinal = ordinal;
    taken.attempt = 2;
    Reading& reading = taken.reading;
    reading.codes = {{1, -2, 3}};
    reading.status = Status::saturated;
    reading.up_mv = Measured{0.1 + 0.2, 1.0 / 3.0, Bound::at_least};
    reading.left_ui = Measured{5e-324, 1e-300, Bound::at_most};
    reading.error_definition = ErrorDefinition::decision;
    reading.basis = Basis::extrapolated;
    reading.error_ratio = 1e-6;
    reading.centre_error_ratio = 0.25;
    reading.counts = {{{0.125, -7.5, 1u << 30}, 17, true}};
    reading.slopes = EdgeSlopes{{-4.9, 0.1 + 0.2, Bound::exact},
                                {-5.1, 1e-300, Bound::at_most},
                                {-0.02, 1.0 / 3.0, Bound::exact},
                                {-0.019, 0.001, Bound::at_least}};
    reading.telemetry = {{"supply_v", 0.9}, {"die_temperature_c", -1.0 / 3.0}};
    reading.bit_count = 1ull << 40;
    reading.cost_s = 0.0871;
    WireOperation op;
    op.kind = WireOperation::Kind::wait_until;
    op.address = 0xFFFFFFFF;
    op.mask = 0x80000000;
    op.value = 1;
    op.result = 0xFFFFFFFF;
    op.expired = true;
    taken.wire = {op};
    return taken;
}

std::vector<Event> one_of_each() {
    SavedLane saved;
    saved.lane = Lane{3};
    saved.fields = {{{"EQ_R1", "code"}, 0x100, 0x1F, 9, 0, 31, Role::tuned, "r1"}};
    Request looks;
    looks.codes = {{1, 2, 3}};
    looks.what = LooksWanted{{{0.5, -10, 1000}}};
    looks.why = "why \xC3\xA9";
    Request margin;
    margin.codes = {{1, 2, 3}};
    margin.what = MarginWanted{1e-6, 1ull << 31, {31, 30, 0.25, 0.26}};
    margin.wait_s = 0.1 + 0.2;
    Decision decision;
    decision.codes = {{4, 5, 6}};
    decision.unchanged = true;
    decision.reason = "because";
    decision.notes = {"one", "two"};
    decision.reading_count = 9;
    decision.standard_readings = 9.5;
    decision.bench_s = 0.9;
    RunEnded ended;
    PreflightItem item;
    item.lane = Lane{3};
    item.name = "repeatability";
    item.result = ItemResult::passed;
    item.found = "sigma of one edge";
    item.expected = "at most 2 mV";
    item.values = {{"height_sigma_mv", 1.0 / 3.0}};
    item.codes = Codes{{1, 2, 3}};
    item.settings = "error ratio 1e-06, 2147483648 bits";
    item.from = "run-0";
    ended.ending = Ending::wall_limit;
    ended.reason = "over";
    ended.link = {1, 2, 3, 4, 5};
    ended.wall_s = 1.25;
    return {
        Identified{{{{"chip", 1}}, true}},
        LaneSaved{saved},
        Intent{Lane{3}, 0, 0, Stage::search, looks},
        Intent{Lane{3}, 1, 2, Stage::compare, margin},
        full_reading(1),
        ReadingVoid{Lane{3}, 2, 1, "reset", {}},
        ReadingVoid{Lane{3}, 2, 2, "expected 9, found 3", "EQ_R1.code"},
        LaneDecided{Lane{3}, decision},
        LaneSettled{Lane{3}, Settlement::decided, {{4, 5, 6}}},
        LaneSettled{Lane{3}, Settlement::given_up, {{4, 5, 6}}},
        LaneFinished{Lane{3}, LaneOutcome::unchanged, "kept"},
        RunResumed{123, "again"},
        ended,
        CodesWritten{Lane{3}, {{7, 8, 9}}, "by hand"},
        item,
        PreflightItem{{}, "lock", ItemResult::failed, "lane 3: 0", "1", "mend it", {}, {}, {}, {}},
        PreflightBegun{Lane{3}, {"repeatability", "settle_time"}},
        NoiseChosen{Lane{3}, {2, 1.0 / 64, 0.1 + 0.2, 0.006, 0.4, 0.003}, "run-0"},
        LaneReset{Lane{3}}};
}

}  // namespace

TEST_CASE("Every kind of event comes back from the store as it went in") {
    TemporaryFolder folder;
    const std::vector<Event> events = one_of_each();
    {
        Database database(folder / "s.db", Database::Mode::read_write);
        database.add_run(small_manifest("run-1"));
        std::vector<NewEvent> added;
        for (const Event& event : events) added.push_back({"run-1", 42, event, 0});
        std::vector<NewEvent*> rows;
        for (NewEvent& event : added) rows.push_back(&event);
        database.append(rows);
    }
    const Database database(folder / "s.db", Database::Mode::read_only);
    const std::vector<StoredEvent> stored = database.events("run-1", 0, 100);
    REQUIRE(stored.size() == events.size());
    for (std::size_t i = 0; i < events.size(); ++i) {
        CHECK(stored[i].event.index() == events[i].index());
        CHECK(encode_body(stored[i].event) == encode_body(events[i]));
        CHECK(stored[i].at_ns == 42);
        CHECK(stored[i].seq == static_cast<EventSeq>(i + 1));
    }
    const auto& was = std::get<ReadingTaken>(events[4]);
    const auto& is = std::get<ReadingTaken>(stored[4].event);
    CHECK(is.reading.codes == was.reading.codes);
    CHECK(is.reading.up_mv == was.reading.up_mv);
    CHECK_FALSE(is.reading.down_mv);
    CHECK(is.reading.left_ui == was.reading.left_ui);
    CHECK(is.reading.counts == was.reading.counts);
    CHECK(is.reading.slopes == was.reading.slopes);
    CHECK(is.reading.telemetry == was.reading.telemetry);
    CHECK(std::get<Intent>(stored[3].event).request.wait_s == 0.1 + 0.2);
    CHECK(std::get<Intent>(stored[3].event).request.what ==
          std::get<Intent>(events[3]).request.what);
    CHECK(is.reading.centre_error_ratio == was.reading.centre_error_ratio);
    CHECK(is.reading.bit_count == was.reading.bit_count);
    CHECK(is.reading.cost_s == was.reading.cost_s);
    CHECK(is.reading.basis == was.reading.basis);
    CHECK(is.reading.error_definition == was.reading.error_definition);
    CHECK(is.wire == was.wire);
    const RunRow row = database.find_run("run");
    CHECK(encode_manifest(row.manifest) == encode_manifest(small_manifest("run-1")));
}

TEST_CASE("A reading of one lane and ordinal cannot be stored twice") {
    TemporaryFolder folder;
    Database database(folder / "s.db", Database::Mode::read_write);
    database.add_run(small_manifest("run-1"));
    NewEvent first{"run-1", 1, full_reading(5), 0}, second{"run-1", 2, full_reading(5), 0};
    database.append({&first});
    CHECK_THROWS_AS(database.append({&second}), StoreError);
    CHECK(database.events("run-1", 0, 10).size() == 1);
}

TEST_CASE(
    "A store of format 1 is read as it is, and brought up to date behind a copy for writing") {
    TemporaryFolder folder;
    const std::string path = folder / "s.db";
    {
        Database database(path, Database::Mode::read_write);
        database.add_run(small_manifest("run-1"));
        NewEvent old{"run-1", 1, full_reading(5), 0};
        database.append({&old});
    }
    {
        SQLite::Database raw(path, SQLite::OPEN_READWRITE);
        raw.exec("ALTER TABLE readings DROP COLUMN slopes");
        raw.exec("ALTER TABLE readings DROP COLUMN telemetry");
        raw.exec("PRAGMA user_version = 1");
    }
    const auto reading_of = [](const Database& database, std::size_t index) {
        return std::get<ReadingTaken>(database.events("run-1", 0, 10).at(index).event).reading;
    };
    const Reading was = full_reading(5).reading;
    {
        const Database old(path, Database::Mode::read_only);
        CHECK(reading_of(old, 0).counts == was.counts);
        CHECK_FALSE(reading_of(old, 0).slopes);
        CHECK_FALSE(std::filesystem::exists(path + ".format1"));
    }
    Database now(path, Database::Mode::read_write);
    CHECK(reading_of(now, 0).up_mv == was.up_mv);
    CHECK_FALSE(reading_of(now, 0).slopes);
    NewEvent next{"run-1", 2, full_reading(6), 0};
    now.append({&next});
    CHECK(reading_of(now, 1).slopes == was.slopes);
    CHECK(reading_of(now, 1).telemetry == was.telemetry);
    const Database copy(path + ".format1", Database::Mode::read_only);
    CHECK(reading_of(copy, 0).counts == was.counts);
    SQLite::Database raw_copy(path + ".format1", SQLite::OPEN_READONLY);
    CHECK(raw_copy.execAndGet("PRAGMA user_version").getInt() == 1);
    SQLite::Database raw(path, SQLite::OPEN_READONLY);
    CHECK(raw.execAndGet("PRAGMA user_version").getInt() == 2);
}

TEST_CASE("A run is found by its id, by a prefix of just one, or as the latest") {
    TemporaryFolder folder;
    Database database(folder / "s.db", Database::Mode::read_write);
    CHECK_THROWS_AS(database.find_run("latest"), NoSuchRun);
    database.add_run(small_manifest("ab-1"));
    Manifest later = small_manifest("ab-2");
    later.started_ns += 1;
    database.add_run(later);
    CHECK(database.find_run("ab-1").id == "ab-1");
    CHECK(database.find_run("latest").id == "ab-2");
    CHECK_THROWS_AS(database.find_run("ab"), NoSuchRun);
    CHECK_THROWS_WITH(database.find_run("zz"), Catch::Contains("lanewright runs"));
}

TEST_CASE("A store of a newer format, or a file of another kind, is refused and left alone") {
    TemporaryFolder folder;
    {
        Database made(folder / "s.db", Database::Mode::read_write);
    }
    {
        SQLite::Database raw(folder / "s.db", SQLite::OPEN_READWRITE);
        raw.exec("PRAGMA user_version = 99");
    }
    CHECK_THROWS_WITH(Database(folder / "s.db", Database::Mode::read_write),
                      Catch::Contains("format 99"));
    std::ofstream(folder / "text.db") << std::string(4096, 'x');
    CHECK_THROWS_AS(Database(folder / "text.db", Database::Mode::read_write), StoreError);
    CHECK(std::filesystem::file_size(folder / "text.db") == 4096);
    {
        SQLite::Database other(folder / "other.db", SQLite::OPEN_READWRITE | SQLite::OPEN_CREATE);
        other.exec("CREATE TABLE t (x)");
    }
    CHECK_THROWS_WITH(Database(folder / "other.db", Database::Mode::read_write),
                      Catch::Contains("not a store"));
}

TEST_CASE("A second writer of one store is told the pid of the first") {
    TemporaryFolder folder;
    boost::asio::io_context io;
    VirtualTimeSource time(io);
    auto first = Store::open(folder / "s.db", time);
    REQUIRE(first.has_value());
    auto second = Store::open(folder / "s.db", time);
    REQUIRE_FALSE(second.has_value());
    CHECK(second.error().cause == Cause::busy);
    CHECK(second.error().text().find(std::to_string(::getpid())) != std::string::npos);
}

TEST_CASE("Appends that wait together share a commit and keep their own order") {
    TemporaryFolder folder;
    boost::asio::io_context io;
    VirtualTimeSource time(io);
    auto store = Store::open(folder / "s.db", time);
    REQUIRE(store.has_value());
    REQUIRE(run_until_done(time, (*store)->add_run(small_manifest("run-1"))).has_value());
    TaskGroup group(io);
    struct Appender {
        static Task<void> many(Store* into, std::uint16_t lane) {
            for (std::uint32_t i = 0; i < 50; ++i) {
                std::vector<Event> one;
                one.push_back(ReadingVoid{Lane{lane}, i, 0, "x", {}});
                auto stored = co_await into->append("run-1", std::move(one));
                if (!stored) co_return stored.error();
            }
            co_return Result<void>{};
        }
    };
    for (std::uint16_t lane = 0; lane < 8; ++lane) {
        group.spawn("appender", Appender::many(store->get(), lane));
    }
    REQUIRE(run_until_done(time, group.join()).has_value());
    std::map<std::uint16_t, std::uint32_t> next;
    const auto events = (*store)->events("run-1");
    CHECK(events.size() == 400);
    for (const StoredEvent& event : events) {
        const auto& empty = std::get<ReadingVoid>(event.event);
        CHECK(empty.ordinal == next[number(empty.lane)]++);
    }
}

TEST_CASE("SHA-256 gives the digests of FIPS 180-4's example messages") {
    // NIST FIPS 180-4, examples "abc" and the empty message (value from memory).
    CHECK(sha256_hex("abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
    CHECK(sha256_hex("") == "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855");
}

TEST_CASE("Times are written in ISO 8601 with the run's own offset") {
    CHECK(iso8601(0, "+00:00") == "1970-01-01T00:00:00.000+00:00");
    CHECK(iso8601(1'000'000'000'250'000'000, "+05:30") == "2001-09-09T07:16:40.250+05:30");
    CHECK(iso8601(1'000'000'000'250'000'000, "-08:00") == "2001-09-08T17:46:40.250-08:00");
}
