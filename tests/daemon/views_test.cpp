// What programs and people read of a run, from a store that was written by hand.

#include <unistd.h>

#include <catch2/catch.hpp>
#include <cstdlib>
#include <filesystem>
#include <limits>
#include <nlohmann/json.hpp>
#include <sstream>
#include <string>
#include <vector>

#include "daemon/store/database.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/run_json.hpp"
#include "daemon/views/run_text.hpp"

namespace {

using namespace lanewright;
using json = nlohmann::ordered_json;

constexpr std::int64_t started_ns = 1'764'601'445'250'000'000;  // 2025-12-01T15:04:05.250Z
constexpr const char* run_id = "20251201T150405-0badcafe";
const Codes former_codes{{28, 2, 3, 3}};
const Codes decided_codes{{9, 8, 7, 1}};

SourceFile source_of(const std::string& name) {
    SourceFile file;
    file.path = std::string(LANEWRIGHT_SOURCE_DIR "/configs/") + name;
    Complaints complaints;
    const auto document = Document::load(file.path, complaints);
    REQUIRE(document);
    file.text = document->source();
    file.sha256 = sha256_hex(file.text);
    return file;
}

// A run that never was: two lanes unless told otherwise, events as a test wants them.
class HandMadeRun {
  public:
    HandMadeRun() {
        std::string pattern =
            (std::filesystem::temp_directory_path() / "lanewright-XXXXXX").string();
        folder_ = ::mkdtemp(pattern.data());
        manifest.run = run_id;
        manifest.started_ns = started_ns;
        manifest.zone = "+05:30";
        manifest.board_file = source_of("boards/demo.json");
        manifest.recipe_file = source_of("recipes/demo.json");
        manifest.board = "tarn-1";
        manifest.recipe = "demo";
        manifest.identity.values = {{"chip", 0x4F5A5238}};
        manifest.identity.simulated = true;
        manifest.lanes = {0, 1};
        manifest.waves = {{0, 1}};
        manifest.seed = 3;
    }
    ~HandMadeRun() {
        std::error_code error;
        std::filesystem::remove_all(folder_, error);
    }
    HandMadeRun(const HandMadeRun&) = delete;
    HandMadeRun& operator=(const HandMadeRun&) = delete;

    void save(std::uint16_t lane) {
        SavedLane saved;
        saved.lane = Lane{lane};
        const char* names[] = {"r1", "r2", "c1", "c2"};
        for (std::size_t i = 0; i < 4; ++i) {
            SavedField field;
            field.field = {"EQ", names[i]};
            field.role = Role::tuned;
            field.dimension = names[i];
            field.value = static_cast<std::uint32_t>(former_codes.value[i]);
            saved.fields.push_back(field);
        }
        add(LaneSaved{saved});
    }

    // Readings are numbered by themselves.
    void read(std::uint16_t lane, Stage stage, Reading reading,
              const std::string& why = "because") {
        const std::uint32_t ordinal = next_ordinal_++;
        add(Intent{Lane{lane}, ordinal, 0, stage, Request{reading.codes, {}, MarginWanted{}, why}});
        add(ReadingTaken{Lane{lane}, ordinal, 0, std::move(reading), {}});
    }

    void decide(std::uint16_t lane, const std::string& reason = "better") {
        Decision decision;
        decision.codes = decided_codes;
        decision.reason = reason;
        add(LaneDecided{Lane{lane}, decision});
    }

    void finish(std::uint16_t lane, LaneOutcome outcome, const std::string& reason = "") {
        add(LaneFinished{Lane{lane}, outcome, reason});
    }

    void add(Event event) {
        NewEvent added;
        added.run = run_id;
        added.at_ns = started_ns + 1'000'000'000 * static_cast<std::int64_t>(events_.size());
        added.event = std::move(event);
        events_.push_back(std::move(added));
    }

    // Stores it all and reads it back, as `show` does.
    RunView view() {
        const std::string path = folder_ + "/store.db";
        Database store(path, Database::Mode::read_write);
        store.add_run(manifest);
        std::vector<NewEvent*> rows;
        for (NewEvent& event : events_) rows.push_back(&event);
        store.append(rows);
        const Database reader(path, Database::Mode::read_only);
        return view_of(reader.find_run("latest"), reader);
    }

    Manifest manifest;

  private:
    std::string folder_;
    std::vector<NewEvent> events_;
    std::uint32_t next_ordinal_ = 0;
};

Reading open_eye(const Codes& codes, double half_mv = 40, double half_ui = 0.3) {
    Reading reading;
    reading.codes = codes;
    reading.status = Status::open;
    reading.error_ratio = 1e-6;
    reading.up_mv = reading.down_mv = Measured{half_mv, 1, Bound::exact};
    reading.left_ui = reading.right_ui = Measured{half_ui, 0.007, Bound::exact};
    reading.bit_count = 1000;
    reading.cost_s = 0.125;
    return reading;
}

Reading height_and_width(const Codes& codes) {
    Reading reading = open_eye(codes);
    reading.up_mv = reading.down_mv = reading.left_ui = reading.right_ui = std::nullopt;
    reading.height_mv = Measured{80, 1, Bound::exact};
    reading.width_ui = Measured{0.6, 0.007, Bound::exact};
    reading.centred_assumed = true;
    return reading;
}

Reading closed_eye(const Codes& codes) {
    Reading reading = open_eye(codes, 0, 0);
    reading.status = Status::closed;
    for (auto member : {&Reading::up_mv, &Reading::down_mv, &Reading::left_ui, &Reading::right_ui})
        (reading.*member)->bound = Bound::at_most;
    return reading;
}

// A lane with a decision and fresh readings before and after.
void add_tuned_lane(HandMadeRun& run, std::uint16_t lane, const Reading& before,
                    const Reading& after) {
    run.save(lane);
    run.read(lane, Stage::search, open_eye(decided_codes, 99));
    run.decide(lane);
    run.read(lane, Stage::compare, before);
    run.read(lane, Stage::compare, after);
    run.finish(lane, LaneOutcome::tuned);
}

json lane_of_run(const RunView& view, std::size_t index) {
    return run_json(view).at("lanes").at(index);
}

std::vector<std::string> lines_of(const std::string& text) {
    std::istringstream in(text);
    std::vector<std::string> lines;
    for (std::string line; std::getline(in, line);) lines.push_back(line);
    return lines;
}

std::string longest_of(const std::string& text) {
    std::string longest;
    for (const std::string& line : lines_of(text)) {
        if (line.size() > longest.size()) longest = line;
    }
    return longest;
}

TEST_CASE(
    "before and after come from fresh readings only, the luckier ones of the search do not count") {
    HandMadeRun run;
    add_tuned_lane(run, 0, open_eye(former_codes, 20), open_eye(decided_codes, 40));
    const json lane = lane_of_run(run.view(), 0);
    CHECK(lane["after"]["up_mv"] == 40);
    CHECK(lane["after"]["height_mv"] == 80);
    CHECK(lane["before"]["height_mv"] == 40);
    CHECK(lane["reading_count"] == 3);
    CHECK(lane["bit_count"] == 3000);
    CHECK(lane["bench_s"] == 0.375);
    CHECK_FALSE(lane["after"].contains("centred"));
    // The demo recipe requires 30 mV and 0.4 UI: 2 * 40 / 30 and 2 * 0.3 / 0.4.
    CHECK(lane["after"]["score"].get<double>() == Approx(1.5).margin(1e-12));
    CHECK(lane["verdict"] == "meets");
}

TEST_CASE("a monitor that tells height and width only gives null for the four edges and says so") {
    HandMadeRun run;
    add_tuned_lane(run, 0, height_and_width(former_codes), height_and_width(decided_codes));
    const json after = lane_of_run(run.view(), 0)["after"];
    for (const char* key : {"up_mv", "up_se_mv", "down_mv", "down_se_mv", "left_ui", "left_se_ui",
                            "right_ui", "right_se_ui"}) {
        INFO(key);
        REQUIRE(after.contains(key));
        CHECK(after[key].is_null());
    }
    CHECK(after["centred"] == "assumed");
    CHECK(after["height_mv"] == 80);
    CHECK(after["width_ui"] == 0.6);
    CHECK(after["score"].get<double>() == Approx(1.5).margin(1e-12));
}

TEST_CASE("limits without an end are null, and the text has no infinity or NaN in it") {
    HandMadeRun run;
    add_tuned_lane(run, 0, closed_eye(former_codes), open_eye(decided_codes));
    Reading beyond = open_eye(decided_codes, 510);
    for (auto member : {&Reading::up_mv, &Reading::down_mv, &Reading::left_ui, &Reading::right_ui})
        (beyond.*member)->bound = Bound::at_least;
    beyond.status = Status::saturated;
    add_tuned_lane(run, 1, open_eye(former_codes), beyond);
    const RunView view = run.view();
    const json closed = lane_of_run(view, 0)["before"], saturated = lane_of_run(view, 1)["after"];
    CHECK(closed["status"] == "closed");
    CHECK(closed["score_low"].is_null());
    CHECK(closed["score_high"].is_number());
    CHECK(saturated["status"] == "saturated");
    CHECK(saturated["score_high"].is_null());
    CHECK(saturated["score_low"].is_number());
    const std::string text = run_json(view).dump() + run_table(view, false) + readings_csv(view);
    for (const char* word : {"inf", "nan", "Infinity", "NaN"}) {
        INFO(word);
        CHECK(text.find(word) == std::string::npos);
    }
}

TEST_CASE("a failed lane has no verdict, keeps its reason, and is not among the register writes") {
    HandMadeRun run;
    add_tuned_lane(run, 0, open_eye(former_codes), open_eye(decided_codes));
    run.save(1);
    run.decide(1);
    run.read(1, Stage::compare, open_eye(decided_codes));
    run.finish(1, LaneOutcome::failed, "the board refused a write");
    const RunView view = run.view();
    const json lane = lane_of_run(view, 1);
    CHECK(lane["outcome"] == "failed");
    CHECK(lane["verdict"].is_null());
    CHECK(lane["reason"] == "the board refused a write");
    CHECK_FALSE(all_meet(view));
    for (const std::string& line : lines_of(register_writes(view))) {
        INFO(line);
        CHECK((line.starts_with("0 ") || line.starts_with("#")));
        CHECK_FALSE(line.starts_with("# lane 1"));
    }
}

TEST_CASE("a lane that was never begun is there, with null for all that is not known") {
    HandMadeRun run;
    run.save(0);
    const RunView view = run.view();
    const json whole = run_json(view);
    REQUIRE(whole["lanes"].size() == 2);
    CHECK(whole["status"] == "interrupted");
    for (const char* key : {"verdict", "outcome", "codes", "before", "after", "response"}) {
        INFO(key);
        CHECK(whole["lanes"][1][key].is_null());
    }
    CHECK(whole["lanes"][0]["former_codes"]["r1"] == 28);
    CHECK(whole["lanes"][1]["former_codes"].is_null());
    CHECK(run_account(view, false).find("not finished") != std::string::npos);
    CHECK_THROWS_AS(register_writes(view), StoreError);
}

TEST_CASE("link counts and wall time of a run add up over its resumptions") {
    HandMadeRun run;
    RunEnded ended;
    ended.ending = Ending::stopped;
    ended.link = {100, 1, 2, 3, 4};
    ended.wall_s = 2.5;
    run.add(ended);
    run.add(RunResumed{1, "again"});
    run.add(ended);
    const json whole = run_json(run.view());
    CHECK(whole["link"]["frames"] == 200);
    CHECK(whole["link"]["bad_frames"] == 2);
    CHECK(whole["link"]["retries"] == 4);
    CHECK(whole["link"]["reconnects"] == 6);
    CHECK(whole["link"]["resets"] == 8);
    CHECK(whole["wall_s"] == 5.0);
    CHECK(whole["status"] == "stopped");
}

TEST_CASE("text with commas, quotes and line ends is quoted in the CSV as RFC 4180 says") {
    HandMadeRun run;
    run.manifest.condition = "hot, \"slow\"\ncorner";
    run.save(0);
    run.read(0, Stage::search, open_eye(decided_codes), "a, \"b\"");
    const std::string csv = readings_csv(run.view());
    CHECK(csv.find(",\"hot, \"\"slow\"\"\ncorner\",") != std::string::npos);
    CHECK(csv.find(",\"a, \"\"b\"\"\"\n") != std::string::npos);
}

TEST_CASE("a CSV row has as many fields as the header, its units there, its time with offset") {
    HandMadeRun run;
    run.save(0);
    run.read(0, Stage::search, open_eye(decided_codes));
    run.read(0, Stage::search, height_and_width(decided_codes));
    const std::vector<std::string> lines = lines_of(readings_csv(run.view()));
    REQUIRE(lines.size() == 3);
    const auto commas = [](const std::string& line) {
        return std::count(line.begin(), line.end(), ',');
    };
    CHECK(commas(lines[1]) == commas(lines[0]));
    CHECK(commas(lines[2]) == commas(lines[0]));
    for (const char* name :
         {",up_mv,up_se_mv,", ",left_ui,left_se_ui,", ",cost_s,", ",r1_code,r2_code,"}) {
        INFO(name);
        CHECK(lines[0].find(name) != std::string::npos);
    }
    // The intent is the second event, its reading the third: two seconds after the start, in India.
    CHECK(lines[1].find(",2025-12-01T20:34:07.250+05:30,") != std::string::npos);
    CHECK(lines[2].find(",,,,,,,,,,,,80,") != std::string::npos);  // no four edges, then the height
}

TEST_CASE("register writes follow the apply sequence of the board file, in place and in hex") {
    HandMadeRun run;
    add_tuned_lane(run, 1, open_eye(former_codes), open_eye(decided_codes));
    std::vector<std::string> writes;
    for (const std::string& line : lines_of(register_writes(run.view()))) {
        if (!line.starts_with("#")) writes.push_back(line);
    }
    // configs/boards/demo.json: lanes begin at 0x100, each has 0x40 addresses.
    const std::vector<std::string> wanted = {
        "1    RX_CTL       0x0145  0x0001  0x0001  # RX_CTL.hold_loops = 1",
        "1    EQ_R1        0x0140  0x001F  0x0009  # r1 = 9",
        "1    EQ_R2        0x0142  0x000F  0x0008  # r2 = 8",
        "1    EQ_C1        0x0141  0x000F  0x0007  # c1 = 7",
        "1    EQ_C2        0x0143  0x0007  0x0001  # c2 = 1",
        "1    EQ_LOAD      0x0144  0x0001  0x0001  # EQ_LOAD.strobe = 1",
        "1    RX_CTL       0x0145  0x0001  0x0000  # RX_CTL.hold_loops = 0"};
    CHECK(writes == wanted);
}

TEST_CASE("tables and accounts are no wider than 80 columns, however long names and reasons are") {
    HandMadeRun run;
    run.manifest.lanes = {0, 1};
    run.manifest.condition =
        "a label that goes on and on, as labels on benches do when people are careful";
    run.manifest.tags = {{"wafer", std::string(60, 'w')}};
    add_tuned_lane(run, 0, closed_eye(former_codes), open_eye(decided_codes, 0.004, 0.0001));
    run.save(1);
    std::string reason = "the board";
    for (int i = 0; i < 40; ++i) reason += " said no";
    run.finish(1, LaneOutcome::failed, reason);
    const RunView view = run.view();
    for (const std::string& text :
         {run_table(view, false), run_account(view, false), runs_table({view, view})}) {
        CHECK(text.size() > 80);
        const std::string longest = longest_of(text);
        INFO(longest);
        CHECK(longest.size() <= 80);
    }
    CHECK(runs_table({view}).find(run_id) != std::string::npos);
}

TEST_CASE("colours are there when asked for and change nothing else") {
    HandMadeRun run;
    add_tuned_lane(run, 0, open_eye(former_codes), open_eye(decided_codes));
    const RunView view = run.view();
    std::string coloured = run_table(view, true);
    CHECK(coloured.find("\033[32m") != std::string::npos);
    for (const std::string escape : {"\033[32m", "\033[0m"}) {
        for (auto at = coloured.find(escape); at != std::string::npos; at = coloured.find(escape))
            coloured.erase(at, escape.size());
    }
    CHECK(coloured == run_table(view, false));
}

TEST_CASE("a run of a board that is not simulated does not say it is") {
    HandMadeRun run;
    run.manifest.identity.simulated = false;
    add_tuned_lane(run, 0, open_eye(former_codes), open_eye(decided_codes));
    const RunView view = run.view();
    CHECK(run_json(view)["simulated"] == false);
    for (const std::string& text :
         {run_account(view, false), runs_table({view}), register_writes(view)}) {
        CHECK(text.find("SIMULATED") == std::string::npos);
        CHECK(text.find("(sim.)") == std::string::npos);
    }
}

TEST_CASE("a run whose kept files this version cannot read is refused as bad data") {
    HandMadeRun run;
    run.manifest.recipe_file.text = "{\"format\": \"lanewright-recipe/99\"}";
    try {
        run.view();
        FAIL("it was taken");
    } catch (const StoreError& error) {
        CHECK(error.fault().cause == Cause::bad_data);
        CHECK(std::string(error.what()).find("recipes/demo.json") != std::string::npos);
    }
}

TEST_CASE("an error object names cause, exit code, board, lane, register and hint") {
    Fault fault;
    fault.cause = Cause::timeout;
    fault.what = "no answer";
    fault.board = "tarn-1";
    fault.lane = Lane{3};
    fault.reg = "EQ_R1";
    fault.hint = "Check the cable";
    const json error = error_json(fault, 69)["error"];
    CHECK(error["cause"] == "timeout");
    CHECK(error["exit"] == 69);
    CHECK(error["board"] == "tarn-1");
    CHECK(error["lane"] == 3);
    CHECK(error["register"] == "EQ_R1");
    CHECK(error["hint"] == "Check the cable");
    CHECK(error["what"].get<std::string>().find("no answer") == 0);
}

}  // namespace
