#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>

#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

Fault fault_of(Cause cause, const std::string& what) {
    Fault fault;
    fault.cause = cause;
    fault.what = what;
    return fault;
}

std::map<std::uint16_t, Codes> decisions(const Start& start) {
    std::map<std::uint16_t, Codes> out;
    for (const auto& [lane, state] : start.state.lanes) {
        if (state.decision) out[lane] = state.decision->codes;
    }
    return out;
}

// Every reading of strategies and comparisons as it was stored: lane, ordinal, codes and a value.
std::vector<std::string> readings(const Start& start) {
    std::vector<std::string> out;
    for (const auto& [lane, state] : start.state.lanes) {
        for (const LaneReadingRecord& record : state.readings) {
            if (record.stage == Stage::reference) continue;  // one more after each reset
            std::string text = std::to_string(lane) + "#" + std::to_string(record.ordinal);
            for (const auto code : record.reading.codes.value) text += " " + std::to_string(code);
            text += " " + std::to_string(record.reading.up_mv->value);
            out.push_back(text);
        }
    }
    return out;
}

}  // namespace

TEST_CASE("A run saves, tunes, compares afresh, leaves the codes and removes its note") {
    EngineBench bench;
    const Start start = bench.start({});
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    for (const std::uint16_t lane : {0, 1, 2}) {
        const LaneState& state = start.state.lanes.at(lane);
        REQUIRE(state.decision);
        CHECK(state.finished->outcome == LaneOutcome::tuned);
        CHECK(bench.board_codes.at(lane) == state.decision->codes);
        CHECK_FALSE(state.moved);
    }
    CHECK(bench.board_codes.at(3) == FakeBoard::reset_codes());
    CHECK_FALSE(std::filesystem::exists(bench.note_path));
}

TEST_CASE("Saved values are stored before the first intent, and each intent before its reading") {
    EngineBench bench;
    const Start start = bench.start({});
    std::map<std::uint16_t, int> saved, open_intents;
    for (const StoredEvent& event : start.events) {
        const auto lane = lane_of(event.event);
        if (!lane) continue;
        if (std::holds_alternative<LaneSaved>(event.event)) ++saved[number(*lane)];
        if (std::holds_alternative<Intent>(event.event)) {
            CHECK(saved[number(*lane)] == 1);
            CHECK(open_intents[number(*lane)]++ == 0);
        }
        if (std::holds_alternative<ReadingTaken>(event.event)) {
            CHECK(open_intents[number(*lane)]-- == 1);
        }
    }
    for (const auto& [lane, open] : open_intents) CHECK(open == 0);
}

TEST_CASE("Before and after come only from readings taken after the decision, in turn A B B A") {
    EngineBench bench;
    StartOptions options;
    options.recipe.verify_rounds = 1;
    const Start start = bench.start(options);
    for (const auto& [lane, state] : start.state.lanes) {
        std::vector<Codes> compared;
        for (const LaneReadingRecord& record : state.readings) {
            if (record.stage == Stage::compare) compared.push_back(record.reading.codes);
        }
        const Codes a = *state.former(), b = state.decision->codes;
        CHECK(compared == std::vector<Codes>{a, b, b, a});
    }
}

TEST_CASE("With afterwards restore the former codes stand on the board at the end") {
    EngineBench bench;
    StartOptions options;
    options.recipe.afterwards = Afterwards::restore;
    const Start start = bench.start(options);
    REQUIRE(start.outcome.has_value());
    for (const std::uint16_t lane : {0, 1, 2}) {
        CHECK(bench.board_codes.at(lane) == FakeBoard::reset_codes());
        CHECK(start.state.lanes.at(lane).finished->outcome == LaneOutcome::tuned);
    }
}

TEST_CASE("Two worker threads decide as one does, on the same readings") {
    EngineBench one, two;
    StartOptions options;
    options.lanes = {0, 1, 2, 3, 4, 5, 6, 7};
    const Start first = one.start(options);
    options.threads = 2;
    const Start second = two.start(options);
    CHECK(decisions(first) == decisions(second));
    CHECK(readings(first) == readings(second));
    CHECK(decisions(first).size() == 8);
}

TEST_CASE("A reset in mid-run voids the reading, settles what it undid, and changes no decision") {
    EngineBench undisturbed, disturbed;
    const Start calm = undisturbed.start({});
    int reads = 0;
    const Start rough = disturbed.start({}, [&reads](FakeBoard& board) {
        board.before_operation = [&reads, &board](const std::string& what, Lane) {
            if (what != "read") return Fault{};
            ++reads;
            if (reads != 20 && reads != 150) return Fault{};
            board.reset();
            return fault_of(Cause::board_reset, "the board has reset");
        };
    });
    REQUIRE(rough.outcome.has_value());
    CHECK(rough.outcome->ended.ending == Ending::complete);
    CHECK(decisions(rough) == decisions(calm));
    CHECK(readings(rough) == readings(calm));
    std::uint32_t voids = 0;
    for (const auto& [lane, state] : rough.state.lanes) {
        voids += state.void_count;
        CHECK(disturbed.board_codes.at(lane) == state.decision->codes);
    }
    CHECK(voids >= 1);
    CHECK_FALSE(std::filesystem::exists(disturbed.note_path));
}

TEST_CASE("A stop restores lanes without a decision, and the resumed run decides the same") {
    EngineBench undisturbed, bench;
    const Start calm = undisturbed.start({});
    StartOptions options;
    int stored = 0;
    options.on_event = [&stored](const StoredEvent& event, Stop& stop) {
        if (std::holds_alternative<ReadingTaken>(event.event) && ++stored == 25) stop.request();
    };
    const Start stopped = bench.start(options);
    REQUIRE(stopped.outcome.has_value());
    CHECK(stopped.outcome->ended.ending == Ending::stopped);
    CHECK(decisions(stopped).size() < 3);
    for (const std::uint16_t lane : {0, 1, 2}) {
        if (!stopped.state.lanes.at(lane).decision) {
            CHECK(bench.board_codes.at(lane) == FakeBoard::reset_codes());
        }
    }
    CHECK_FALSE(std::filesystem::exists(bench.note_path));

    const Start resumed = bench.start({});
    CHECK(resumed.run == stopped.run);
    CHECK(resumed.outcome->ended.ending == Ending::complete);
    CHECK(decisions(resumed) == decisions(calm));
    CHECK(readings(resumed) == readings(calm));
}

TEST_CASE("A complete run is not resumed, a different seed or --new begins another") {
    EngineBench bench;
    const Start first = bench.start({});
    const Start again = bench.start({});
    CHECK(again.run != first.run);
    StartOptions stopping;
    stopping.on_event = [](const StoredEvent& event, Stop& stop) {
        if (std::holds_alternative<ReadingTaken>(event.event)) stop.request();
    };
    const Start stopped = bench.start(stopping);
    StartOptions other_seed;
    other_seed.seed = 2;
    CHECK(bench.start(other_seed).run != stopped.run);
    const Start stopped_again = bench.start(stopping);
    StartOptions anew;
    anew.anew = true;
    CHECK(bench.start(anew).run != stopped_again.run);
}

TEST_CASE("A lost link leaves the note, and whatever starts next restores first") {
    EngineBench bench;
    int reads = 0;
    const Start lost = bench.start({}, [&reads](FakeBoard& board) {
        board.before_operation = [&reads](const std::string& what, Lane) {
            if (what == "read" && ++reads < 30) return Fault{};
            if (reads < 30) return Fault{};
            return fault_of(Cause::unreachable, "the link is gone");
        };
    });
    REQUIRE_FALSE(lost.outcome.has_value());
    CHECK(lost.outcome.error().cause == Cause::unreachable);
    CHECK(lost.outcome.error().text().find(bench.note_path) != std::string::npos);
    REQUIRE(std::filesystem::exists(bench.note_path));
    CHECK(bench.board_codes.at(0) != FakeBoard::reset_codes());

    SECTION("with the same store: restored, then resumed") {
        const Start next = bench.start({});
        CHECK(next.run == lost.run);
        REQUIRE(bench.log.size() > 4);
        CHECK(bench.log[1].starts_with("restore"));
        CHECK(bench.log[2].starts_with("restore"));
        CHECK(bench.log[3].starts_with("restore"));
        CHECK(next.outcome->ended.ending == Ending::complete);
    }
    SECTION("with another store: restored all the same, then a new run") {
        StartOptions options;
        options.store = "other.db";
        const Start next = bench.start(options);
        CHECK(next.run != lost.run);
        CHECK(bench.log[1].starts_with("restore"));
        for (const auto& [lane, state] : next.state.lanes) {
            CHECK(*state.former() == FakeBoard::reset_codes());
        }
    }
    SECTION("on another board: refused, and the note stays") {
        bench.serial = 8;
        const Start next = bench.start({});
        REQUIRE_FALSE(next.outcome.has_value());
        CHECK(next.outcome.error().cause == Cause::wrong_board);
        CHECK(std::filesystem::exists(bench.note_path));
        CHECK(bench.log == std::vector<std::string>{"identify 0"});
    }
    SECTION("a note that cannot be read is not deleted and nothing is started") {
        std::ofstream(bench.note_path) << "{ damaged";
        const Start next = bench.start({});
        REQUIRE_FALSE(next.outcome.has_value());
        CHECK(next.outcome.error().cause == Cause::io);
        CHECK(std::filesystem::exists(bench.note_path));
        CHECK(bench.log == std::vector<std::string>{"identify 0"});
    }
}

TEST_CASE("A lane that the board refuses fails alone and is restored") {
    EngineBench bench;
    int reads = 0;
    const Start start = bench.start({}, [&reads](FakeBoard& board) {
        board.before_operation = [&reads](const std::string& what, Lane lane) {
            if (what != "read" || number(lane) != 1 || ++reads < 5) return Fault{};
            return fault_of(Cause::refused, "no register there");
        };
    });
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    CHECK(start.state.lanes.at(1).finished->outcome == LaneOutcome::failed);
    CHECK(start.state.lanes.at(1).finished->reason.find("no register there") != std::string::npos);
    CHECK(bench.board_codes.at(1) == FakeBoard::reset_codes());
    CHECK(start.state.lanes.at(0).finished->outcome == LaneOutcome::tuned);
}

TEST_CASE("A reading that comes to nothing again and again fails its lane, not the run") {
    EngineBench bench;
    const Start start = bench.start({}, [](FakeBoard& board) {
        board.before_operation = [](const std::string& what, Lane lane) {
            if (what != "read" || number(lane) != 2) return Fault{};
            return fault_of(Cause::wait_expired, "the monitor stays busy");
        };
    });
    REQUIRE(start.outcome.has_value());
    const LaneState& lane = start.state.lanes.at(2);
    CHECK(lane.finished->outcome == LaneOutcome::failed);
    CHECK(lane.void_count == 6);
    CHECK(lane.readings.empty());
    CHECK(lane.finished->reason.find("the monitor stays busy") != std::string::npos);
    CHECK(bench.board_codes.at(2) == FakeBoard::reset_codes());
}

TEST_CASE("The wall limit ends a run, restores, and is stored as the reason") {
    EngineBench bench;
    StartOptions options;
    options.recipe.wall_limit_s = 1.0;  // of virtual time: some ten readings
    const Start start = bench.start(options);
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::wall_limit);
    CHECK(start.state.ended->ending == Ending::wall_limit);
    for (const std::uint16_t lane : {0, 1, 2}) {
        CHECK(bench.board_codes.at(lane) == FakeBoard::reset_codes());
    }
}

TEST_CASE("Dimensions that the recipe leaves out stay as found") {
    EngineBench bench;
    StartOptions options;
    options.recipe.dimensions = {"r1", "c1"};
    const Start start = bench.start(options);
    for (const auto& [lane, state] : start.state.lanes) {
        for (const LaneReadingRecord& record : state.readings) {
            CHECK(record.reading.codes.value[1] == FakeBoard::reset_codes().value[1]);
            CHECK(record.reading.codes.value[3] == FakeBoard::reset_codes().value[3]);
        }
    }
}

TEST_CASE("A second process on the same endpoint is told who holds it") {
    EngineBench bench;
    auto held = Endpoint::take(TcpLinkDescription{"localhost", 40125});
    REQUIRE(held.has_value());
    const Start start = bench.start({});
    REQUIRE_FALSE(start.outcome.has_value());
    CHECK(start.outcome.error().cause == Cause::busy);
    CHECK(start.outcome.error().text().find(std::to_string(::getpid())) != std::string::npos);
}

TEST_CASE("A reset while the last lanes are settled undoes no lane for good") {
    EngineBench bench;
    int restores = 0;
    const Start start = bench.start({}, [&restores](FakeBoard& board) {
        board.before_operation = [&restores, &board](const std::string& what, Lane) {
            if (what != "restore" || ++restores != 3) return Fault{};
            board.reset();
            return fault_of(Cause::board_reset, "the board has reset");
        };
    });
    REQUIRE(start.outcome.has_value());
    CHECK(start.outcome->ended.ending == Ending::complete);
    for (const auto& [lane, state] : start.state.lanes) {
        CHECK(bench.board_codes.at(lane) == state.decision->codes);
    }
    CHECK_FALSE(std::filesystem::exists(bench.note_path));
}
