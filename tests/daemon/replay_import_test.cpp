// Margins logged by other means: every row a reading, or rejected with its reason.

#include <catch2/catch.hpp>

#include "daemon/replay/counterfactual.hpp"
#include "daemon/replay/import.hpp"
#include "daemon/views/replay_views.hpp"
#include "daemon/views/run_text.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

ColumnMap columns_of(const std::string& text) {
    Complaints complaints;
    std::optional<ColumnMap> out;
    if (auto document = Document::parse(text, "map.json", complaints)) {
        out = decode_columns(*document, complaints);
    }
    if (!out) throw std::runtime_error(complaints.text());
    return std::move(*out);
}

// Heights in steps of 2 mV and widths in ps, no standard errors: a plain lab log.
const char* const lab_map = R"({
  "format": "lanewright-columns/1", "name": "lab", "separator": ";",
  "lane": {"column": "channel"},
  "codes": [{"dimension": "a", "column": "A"}, {"dimension": "b", "column": "B"}],
  "margins": {"height": {"column": "h", "unit": "mV", "scale": 2},
              "width": {"column": "w", "unit": "ps"}},
  "error_definition": "unknown", "error_ratio": "unknown", "pattern": "unknown",
  "condition": {"column": "temp"}, "simulated": {"value": false},
  "tags": {"chip": {"column": "chip"}},
  "board": {"bit_rate_gbps": 25,
    "dimensions": [{"name": "a", "lowest": 0, "highest": 7}, {"name": "b", "lowest": 2, "highest": 3}],
    "noise": {"height_step_mv": 2, "height_sigma_mv": 1, "width_step_ui": 0.01, "width_sigma_ui": 0}}
})";

ImportedRows imported(const std::string& csv, const ColumnMap& columns) {
    auto rows = import_rows(csv, columns, *columns.board);
    if (!rows) throw FaultError(rows.error());
    return std::move(*rows);
}

const ReadingTaken& reading(const ImportedRun& run, std::size_t number) {
    for (const Event& event : run.events) {
        const auto* taken = std::get_if<ReadingTaken>(&event);
        if (taken != nullptr && number-- == 0) return *taken;
    }
    throw std::out_of_range("no such reading");
}

RunState state_of(const ImportedRun& run) {
    RunState state;
    EventSeq seq = 0;
    for (const Event& event : run.events) state.apply({++seq, "run", 0, event});
    return state;
}

}  // namespace

TEST_CASE("Units, scale and declared noise of a plain log are applied") {
    const ColumnMap columns = columns_of(lab_map);
    const auto rows = imported("channel;A;B;h;w;temp;chip\n0;3;2;21;20;85C;X1\n", columns);
    CHECK(rows.rejected.empty());
    REQUIRE(rows.runs.size() == 1);
    CHECK(rows.runs[0].condition == "85C");
    CHECK(rows.runs[0].tags.at("chip") == "X1");
    const Reading& one = reading(rows.runs[0], 0).reading;
    CHECK(one.codes == Codes{{3, 2}});
    CHECK(one.height_mv->value == 42);
    CHECK(one.width_ui->value == Approx(0.5));  // 20 ps of 40 ps a bit
    // Both edges blur an opening; the step enters once: sqrt(2^2/12 + 2 * 1^2).
    CHECK(one.height_mv->std_error == Approx(std::sqrt(4.0 / 12 + 2)));
    CHECK(one.width_ui->std_error == Approx(0.01 / std::sqrt(12)));
    CHECK(one.centred_assumed);
    CHECK(one.status == Status::open);
    CHECK(one.error_definition == ErrorDefinition::unknown);
    CHECK(one.error_ratio == 0);
}

TEST_CASE("Every rejected row is listed with line, column and reason, in the file's order") {
    const ColumnMap columns = columns_of(lab_map);
    const auto rows = imported(
        "channel;A;B;h;w;temp;chip\r\n"
        "0;3;2;21;20;;X\r\n"        // good
        "0;8;2;21;20;;X\r\n"        // code above its limit
        "0;3;2;1,5;20;;X\r\n"       // decimal comma
        "0;3;2;nan;20;;X\r\n"       // no number
        "0;3;2;21;;;X\r\n"          // half of a margin
        "0;3;2;;;;X\r\n"            // none at all
        "2000;3;2;21;20;;X\r\n"     // no such lane
        "0;3;2;21;20;X\r\n"         // a field short
        "0;3;2;21;\"20\"x;;X\r\n"   // quotes
        "0;3.0;2;21;20;;X\r\n"      // no whole number
        "0;\"4\n\";3;22;21;;X\r\n"  // a line end inside a number
        "0;4;3;22;21;;X\r\n",
        columns);
    CHECK(rows.row_count == 12);
    REQUIRE(rows.runs.size() == 1);
    CHECK(rows.runs[0].row_count == 2);
    REQUIRE(rows.rejected.size() == 10);
    const std::vector<std::size_t> lines{3, 4, 5, 6, 7, 8, 9, 10, 11, 12};
    for (std::size_t i = 0; i < lines.size(); ++i) {
        CHECK(rows.rejected[i].line == lines[i]);
        CHECK_FALSE(rows.rejected[i].reason.empty());
    }
    CHECK(rows.rejected[0].column == "A");
    CHECK_THAT(rows.rejected[0].reason, Catch::Contains("\"8\"") && Catch::Contains("0 to 7"));
    CHECK_THAT(rows.rejected[1].reason, Catch::Contains("decimal commas"));
    CHECK_THAT(rows.rejected[6].reason, Catch::Contains("6 fields, expected 7"));
}

TEST_CASE("Margins that no eye has are rejected") {
    const ColumnMap columns = columns_of(lab_map);
    const auto rows = imported(
        "channel;A;B;h;w;temp;chip\n0;1;2;20000;1;;X\n0;1;2;1;-3;;X\n0;1;2;1;90;;X\n"
        "0;1;2;1;1;;X\n",
        columns);
    // Heights are told in steps of 2 mV, widths in ps of a bit of 40 ps. A negative width is a
    // closed eye where the file has no status.
    REQUIRE(rows.rejected.size() == 2);
    CHECK(rows.rejected[0].column == "h");
    CHECK_THAT(rows.rejected[0].reason, Catch::Contains("40000 mV"));
    CHECK(rows.rejected[1].column == "w");
    CHECK_THAT(rows.rejected[1].reason, Catch::Contains("2.25 UI"));
}

TEST_CASE("A file that says of itself to be simulated is not taken as measured") {
    const ColumnMap columns = columns_of(lab_map);
    const auto rows =
        import_rows("channel;A;B;h;w;temp;chip;simulated\n0;1;2;1;1;;X;false\n0;2;2;1;1;;X;true\n",
                    columns, *columns.board);
    REQUIRE_FALSE(rows.has_value());
    CHECK_THAT(rows.error().what, Catch::Contains("simulated") && Catch::Contains("line 3"));
}

TEST_CASE("Looks of the preflight are no margins and no faults") {
    std::string text = lab_map;
    text.insert(text.find("\"tags\""), R"("columns": {"stage": "stage"}, )");
    const ColumnMap columns = columns_of(text);
    const auto rows = imported(
        "channel;A;B;h;w;temp;chip;stage\n0;1;2;;;;X;preflight\n0;1;2;1;1;;X;search\n"
        "0;1;2;;;;X;search\n",
        columns);
    CHECK(rows.not_margins == std::vector<std::size_t>{2});
    REQUIRE(rows.rejected.size() == 1);
    CHECK(rows.rejected[0].line == 4);
}

TEST_CASE("Rows of other conditions or tags become runs of their own") {
    const ColumnMap columns = columns_of(lab_map);
    const auto rows = imported(
        "channel;A;B;h;w;temp;chip\n0;1;2;1;1;hot;X\n0;1;2;1;1;cold;X\n1;1;2;1;1;hot;X\n"
        "0;1;2;1;1;hot;Y\n",
        columns);
    REQUIRE(rows.runs.size() == 3);
    CHECK(rows.runs[1].condition == "hot");
    CHECK(rows.runs[1].lanes == std::vector<std::uint16_t>{0, 1});
}

TEST_CASE("A file that lacks a column, or has one twice, is refused as a whole") {
    const ColumnMap columns = columns_of(lab_map);
    const auto fault = [&](const std::string& csv) {
        const auto rows = import_rows(csv, columns, *columns.board);
        REQUIRE_FALSE(rows.has_value());
        CHECK(rows.error().cause == Cause::bad_data);
        return rows.error().what;
    };
    CHECK_THAT(fault("chanel;A;B;h;w;temp;chip\n"),
               Catch::Contains("\"channel\"") && Catch::Contains("\"chanel\""));
    CHECK_THAT(fault("channel;A;A;B;h;w;temp;chip\n"), Catch::Contains("two columns"));
    CHECK_THAT(fault(""), Catch::Contains("empty"));
    CHECK_THAT(fault("\"a\n"), Catch::Contains("line 1"));
}

TEST_CASE("An ordinal column gives the order and its second use is rejected") {
    std::string text = lab_map;
    text.insert(text.find("\"tags\""), R"("columns": {"ordinal": "n"}, )");
    const ColumnMap columns = columns_of(text);
    const auto rows = imported(
        "channel;A;B;h;w;temp;chip;n\n0;1;2;1;1;;X;7\n0;2;2;1;1;;X;3\n0;3;2;1;1;;X;7\n", columns);
    CHECK(reading(rows.runs[0], 0).ordinal == 3);
    CHECK(reading(rows.runs[0], 0).reading.codes == Codes{{2, 2}});
    REQUIRE(rows.rejected.size() == 1);
    CHECK(rows.rejected[0].line == 4);
    CHECK_THAT(rows.rejected[0].reason, Catch::Contains("line 2"));
}

TEST_CASE("Raw counts of a counting monitor are read back and damaged ones rejected") {
    std::string text = lab_map;
    text.insert(text.find("\"tags\""), R"("columns": {"counts": "raw"}, )");
    const ColumnMap columns = columns_of(text);
    const auto rows = imported(
        "channel;A;B;h;w;temp;chip;raw\n0;1;2;1;1;;X;0.25:-12:1024:7 0:0:4096:99+\n"
        "0;1;2;1;1;;X;0.25:-12:1024\n0;1;2;1;1;;X;0.25:-12:-1:7\n0;1;2;1;1;;X;nan:0:1:1\n"
        "0;1;2;1;1;;X;\n",
        columns);
    const std::vector<Count> wanted{{{0.25, -12, 1024}, 7, false}, {{0, 0, 4096}, 99, true}};
    CHECK(reading(rows.runs[0], 0).reading.counts == wanted);
    CHECK(reading(rows.runs[0], 1).reading.counts.empty());
    REQUIRE(rows.rejected.size() == 3);
    for (const RejectedRow& row : rows.rejected) CHECK(row.column == "raw");
}

TEST_CASE("The import of an export replays as the original run") {
    EngineBench bench;
    const Start start = bench.start({});
    REQUIRE(start.outcome.has_value());
    const Database database(bench.folder / "store.db", Database::Mode::read_only);
    const RunRow row = database.find_run(start.run);
    RunView view;
    view.manifest = row.manifest;
    view.board = demo_board();
    view.recipe = demo_recipe();
    view.space = code_space_of(view.board);
    view.state = start.state;
    Complaints complaints;
    const auto columns =
        load_columns(LANEWRIGHT_SOURCE_DIR "/configs/columns/demo.json", complaints);
    INFO(complaints.text());
    REQUIRE(columns);
    auto rows = import_rows(readings_csv(view), *columns, view.board);
    REQUIRE(rows.has_value());
    CHECK(rows->rejected.empty());
    REQUIRE(rows->runs.size() == 1);
    CHECK(rows->runs[0].simulated);
    const RunState again = state_of(rows->runs[0]);
    for (const char* strategy : {"descent", "descent_axes", "exhaustive"}) {
        Recipe recipe = demo_recipe();
        recipe.strategy.name = strategy;
        recipe.strategy.stride = 4;
        const auto one = replay_with(view.board, recipe, {0, 1, 2}, 1, start.state);
        const auto other = replay_with(view.board, recipe, {0, 1, 2}, 1, again);
        REQUIRE(one.size() == other.size());
        for (std::size_t i = 0; i < one.size(); ++i) {
            INFO(strategy << " lane " << i << ": " << one[i].cause << " / " << other[i].cause);
            CHECK(one[i].never_read == other[i].never_read);
            REQUIRE(one[i].decision.has_value() == other[i].decision.has_value());
            CHECK(one[i].cause == other[i].cause);
            if (!one[i].decision) continue;
            CHECK(one[i].decision->codes == other[i].decision->codes);
            CHECK(one[i].decision->reason == other[i].decision->reason);
            CHECK(one[i].decision->bench_s == other[i].decision->bench_s);
            CHECK(one[i].handed_out == other[i].handed_out);
            REQUIRE(one[i].selected.has_value() == other[i].selected.has_value());
            if (one[i].selected) CHECK(one[i].selected->score == other[i].selected->score);
            CHECK(one[i].fresh_count == other[i].fresh_count);
        }
    }
}
