// What people and programs read of a preflight and of references, from made-up runs.

#include <catch2/catch.hpp>
#include <nlohmann/json.hpp>
#include <sstream>

#include "daemon/engine/lane_setup.hpp"
#include "daemon/views/preflight_views.hpp"
#include "daemon/views/run_json.hpp"
#include "daemon/views/run_text.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;
using json = nlohmann::ordered_json;

namespace {

RunView view_of_events(const std::vector<Event>& events) {
    RunView view;
    view.manifest.run = "20260101T000000-00000001";
    view.manifest.board = "tarn-1";
    view.manifest.recipe = "demo";
    view.manifest.lanes = {0, 1, 2};
    view.board = demo_board();
    view.recipe = demo_recipe();
    view.space = code_space_of(view.board);
    EventSeq seq = 0;
    for (const Event& event : events) view.state.apply({++seq, view.manifest.run, seq, event});
    return view;
}

PreflightItem item_of(const std::string& name, ItemResult result, std::optional<Lane> lane = {}) {
    PreflightItem item;
    item.lane = lane;
    item.name = name;
    item.result = result;
    item.found = "this was found, in words that go on for longer than one line of a terminal has";
    item.expected = "something else";
    item.advice = "mend it";
    return item;
}

Reading open_eye(double half_mv) {
    Reading reading;
    reading.codes = {{1, 2, 3, 4}};
    reading.status = Status::open;
    reading.up_mv = reading.down_mv = Measured{half_mv, 1, Bound::exact};
    reading.left_ui = reading.right_ui = Measured{0.3, 0.007, Bound::exact};
    reading.cost_s = 0.1;
    return reading;
}

void read(std::vector<Event>& events, std::uint32_t ordinal, Stage stage, double half_mv) {
    Request request;
    request.codes = {{1, 2, 3, 4}};
    request.what = MarginWanted{};
    events.push_back(Intent{Lane{1}, ordinal, 0, stage, request});
    events.push_back(ReadingTaken{Lane{1}, ordinal, 0, open_eye(half_mv), {}});
}

std::size_t widest(const std::string& text) {
    std::istringstream lines(text);
    std::size_t most = 0;
    for (std::string line; std::getline(lines, line);) most = std::max(most, line.size());
    return most;
}

}  // namespace

TEST_CASE("The preflight table joins lanes that found the same and keeps to 80 columns") {
    const RunView view = view_of_events({item_of("polarity", ItemResult::failed),
                                         item_of("monitor", ItemResult::passed, Lane{0}),
                                         item_of("monitor", ItemResult::passed, Lane{1}),
                                         item_of("monitor", ItemResult::passed, Lane{2}),
                                         item_of("parallel", ItemResult::not_shown)});
    const std::string table = preflight_table(view);
    CHECK(widest(table) <= 80);
    CHECK(table.find("lanes 0-2: ") != std::string::npos);
    CHECK(table.find("expected: something else") != std::string::npos);
    CHECK(table.find("do: mend it") != std::string::npos);
    CHECK(table.find("not shown") != std::string::npos);
    CHECK_FALSE(preflight_passed(view.state));
    const json object = preflight_json(view);
    CHECK(object["passed"] == false);
    CHECK(object["items"].size() == 5);
    CHECK(object["items"][0]["lane"].is_null());
    CHECK(object["items"][2]["lane"] == 1);
}

TEST_CASE("The latest result of an item is the one that counts") {
    const RunView view = view_of_events(
        {item_of("polarity", ItemResult::failed), item_of("polarity", ItemResult::passed)});
    CHECK(view.state.preflight.size() == 1);
    CHECK(preflight_passed(view.state));
}

TEST_CASE("Measured noise is said in text and JSON, with the run that measured it") {
    const RunView view =
        view_of_events({item_of("repeatability", ItemResult::passed),
                        NoiseChosen{Lane{1}, {2, 1.0 / 64, 1.25, 0.005, 0, 0}, "run-7"}});
    CHECK(run_account(view, false).find("1.25 mV, 0.0050 UI") != std::string::npos);
    const json lane = lane_json(view, lane_result(view, 1));
    CHECK(lane["noise"]["basis"] == "measured");
    CHECK(lane["noise"]["height_sigma_mv"] == 1.25);
    CHECK(lane["noise"]["from"] == "run-7");
    CHECK(noise_of(view, view.state.lanes.at(1)).height_sigma_mv == 1.25);
}

TEST_CASE("A reference that moved is a note and an entry, its reading not the strategy's") {
    std::vector<Event> events;
    read(events, 0, Stage::search, 40);
    read(events, 1, Stage::search, 41);
    read(events, 0x80000000u, Stage::reference, 40);
    read(events, 0x80000001u, Stage::reference, 20);
    const RunView view = view_of_events(events);
    const LaneResult lane = lane_result(view, 1);
    CHECK(lane.reading_count == 4);
    CHECK(lane.side_reading_count == 2);
    CHECK(lane.side_bench_s == Approx(0.2));
    REQUIRE(lane.notes.size() == 1);
    CHECK(lane.notes[0].find("from 40.0 to 20.0 mV") != std::string::npos);
    const json reference = lane_json(view, lane)["reference"];
    CHECK(reference["reading_count"] == 2);
    REQUIRE(reference["shifts"].size() == 1);
    CHECK(reference["shifts"][0]["after_readings"] == 2);
    CHECK(reference["shifts"][0]["before"] == 40);
    CHECK(reference["shifts"][0]["now"] == 20);
}

TEST_CASE("Bytes that a terminal would obey are shown, not sent") {
    CHECK(printable("a\x1b[2Jb\x07") == "a\\x1B[2Jb\\x07");
    CHECK(printable("caf\xC3\xA9 \xC2\x9B"
                    "2J") == "caf\xC3\xA9 \\x9B2J");
    CHECK(printable("two\nlines") == "two\nlines");
    RunView view = view_of_events({});
    view.manifest.board =
        "bo\x1b]0;x\x07"
        "ard";
    view.manifest.tags = {{"chip", "A\x1b[31m7"}};
    view.manifest.condition = "hot\x1b[0m";
    for (const std::string& text : {run_account(view, false), runs_table({view})}) {
        CHECK(text.find('\x1b') == std::string::npos);
        CHECK(text.find('\x07') == std::string::npos);
    }
}
