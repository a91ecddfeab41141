#include <catch2/catch.hpp>
#include <cmath>
#include <string>
#include <vector>

#include "daemon/engine/recipe.hpp"

using namespace lanewright;

namespace {

const std::string source_dir = LANEWRIGHT_SOURCE_DIR;
const std::vector<std::string_view> strategies_known = {"exhaustive", "descent_codes",
                                                        "descent_axes"};

// A recipe with these lines in place of its own margin, ratio and dwell.
std::string recipe_text(const std::string& lines) {
    return "{\"format\": \"lanewright-recipe/1\", \"name\": \"r\",\n" + lines + "\n}\n";
}

const std::string required =
    "\"required\": {\"error_ratio\": 1e-6, \"height_mv\": 30, "
    "\"width_ui\": 0.25}";
const std::string dimensions = "\"dimensions\": [\"r1\", \"c1\"]";
const std::string strategy = "\"strategy\": {\"name\": \"exhaustive\"}";

BoardFile demo_board(const std::string& name = "demo") {
    Complaints complaints;
    auto board = load_board_file(source_dir + "/configs/boards/" + name + ".json", complaints);
    INFO(complaints.text());
    REQUIRE(board);
    return *board;
}

std::string complaints_of_decoding(const std::string& lines) {
    Complaints complaints;
    const auto document = Document::parse(recipe_text(lines), "r.json", complaints);
    REQUIRE(document);
    CHECK_FALSE(decode_recipe(*document, complaints));
    return complaints.text();
}

std::string complaints_against_board(const std::string& lines, const std::string& board = "demo") {
    Complaints complaints;
    const auto document = Document::parse(recipe_text(lines), "r.json", complaints);
    REQUIRE(document);
    const auto recipe = decode_recipe(*document, complaints);
    INFO(complaints.text());
    REQUIRE(recipe);
    check_recipe_against_board(*recipe, demo_board(board), strategies_known, complaints);
    return complaints.text();
}

}  // namespace

TEST_CASE("the demo's recipe is read whole and suits the demo's board") {
    Complaints complaints;
    const auto recipe = load_recipe(source_dir + "/configs/recipes/demo.json", complaints);
    REQUIRE(recipe);
    CHECK_FALSE(recipe->lanes);
    CHECK(recipe->dimensions.size() == 4);
    CHECK(recipe->verify_rounds >= 1);
    CHECK(recipe->seed == 1u);
    check_recipe_against_board(*recipe, demo_board(), strategies_known, complaints);
    CHECK(complaints.text().empty());
}

TEST_CASE("what a recipe leaves out has its stated default") {
    Complaints complaints;
    const auto recipe =
        load_recipe(source_dir + "/tests/corpus/recipes/good/short.json", complaints);
    REQUIRE(recipe);
    CHECK(recipe->search_error_ratio == 1e-6);
    CHECK(recipe->dwell_s == 0.1);
    CHECK(recipe->verify_rounds == 1);
    CHECK(recipe->afterwards == Afterwards::leave);
    CHECK(recipe->strategy.allow_unchanged);
    CHECK(recipe->budget.standard_readings == 0);
    CHECK_FALSE(recipe->accept_extrapolated);
    CHECK_FALSE(recipe->seed);
}

TEST_CASE("lanes of a recipe are numbers and ranges, in ascending order") {
    Complaints complaints;
    const auto recipe =
        load_recipe(source_dir + "/tests/corpus/recipes/good/full.json", complaints);
    REQUIRE(recipe);
    CHECK(*recipe->lanes == std::vector<std::uint16_t>{0, 2, 3, 4, 5});
}

TEST_CASE("errors of a recipe name their place, all at once") {
    CHECK(complaints_of_decoding(dimensions + ",\n" + required +
                                 ",\n\"stratgy\": {\"name\": \"x\"},\n\"dwell_s\": \"long\"") ==
          "r.json:1:1: found no \"strategy\", expected this key, it is required\n"
          "r.json:4:1: /stratgy: found an unknown key \"stratgy\", expected one of "
          "\"accept_extrapolated\", \"afterwards\", \"budget\", \"description\", \"dimensions\", "
          "\"dwell_s\", \"format\", \"lanes\", \"name\", \"required\", \"required_tags\", "
          "\"search_error_ratio\", \"seed\", \"strategy\", \"verify\", \"wall_limit_s\"; did you "
          "mean \"strategy\"?\n"
          "r.json:5:12: /dwell_s: found \"long\", expected a number above 0 and at most 86400; "
          "write a number without quotes\n");
    CHECK(complaints_of_decoding(dimensions + ",\n" + required + ",\n" + strategy +
                                 ",\n\"lanes\": [0, \"5-2\"]") ==
          "r.json:5:14: /lanes/1: found \"5-2\", expected lanes such as \"2-5\", 0 to 1023\n");
}

TEST_CASE("a recipe that names what the board does not have is told what there is") {
    CHECK(complaints_against_board("\"dimensions\": [\"r1\", \"c3\"],\n" + required +
                                   ",\n\"strategy\": {\"name\": \"decent_axes\"},\n"
                                   "\"lanes\": [\"6-9\"]") ==
          "r.json:2:22: /dimensions/1: found \"c3\", expected a dimension of board tarn-1: r1, "
          "r2, c1, c2; did you mean \"c1\"?\n"
          "r.json:4:22: /strategy/name: found \"decent_axes\", expected a strategy: exhaustive, "
          "descent_codes, descent_axes; did you mean \"descent_axes\"?\n"
          "r.json:5:10: /lanes: found lane 8, expected lanes of board tarn-1, 0 to 7\n");
}

TEST_CASE("a latched monitor's lowest error ratio is named beside one that is lower") {
    const std::string said = complaints_against_board(
        dimensions +
        ",\n\"required\": {\"error_ratio\": 1e-12, \"height_mv\": 30, \"width_ui\": "
        "0.25},\n" +
        strategy);
    CHECK(said.find("r.json:3:29: /required/error_ratio: found 1e-12, expected at least 1e-09") !=
          std::string::npos);
}

// Rule of three (Hanley and Lippman-Hand, JAMA 249, 1983): no event in n trials leaves 3/n as the
// upper 95 % limit, exactly -ln(0.05) = 2.9957.
TEST_CASE("a search error ratio that one look cannot show is refused, with what would do") {
    const auto lines = [](const std::string& dwell_s) {
        return dimensions + ",\n" + required + ",\n" + strategy +
               ",\n\"search_error_ratio\": 1e-9, \"dwell_s\": " + dwell_s;
    };
    const std::string said = complaints_against_board(lines("0.1"));
    // At 25 Gb/s 0.1 s is nearest to 2^31 bits, of which 2.147 are wrong.
    CHECK(said.find("r.json:5:23: /search_error_ratio: found 1e-09, 2.14748 errors in a look of") ==
          0);
    const std::string hint = "or a dwell_s of ";
    const std::size_t at = said.find(hint);
    REQUIRE(at != std::string::npos);
    const double longer_s = std::stod(said.substr(at + hint.size()));
    CHECK(longer_s == Approx(std::exp2(32) / 25e9).epsilon(0.01));
    CHECK(complaints_against_board(lines(std::to_string(longer_s))).empty());
}

TEST_CASE("a ratio that a counting monitor only extrapolates to needs the recipe's word") {
    const auto lines = [](const std::string& ratio, const std::string& more) {
        return dimensions + ",\n\"required\": {\"error_ratio\": " + ratio +
               ", \"height_mv\": 30, \"width_ui\": 0.25},\n" + strategy + more;
    };
    const auto said_of = [&](const std::string& ratio, const std::string& more = "") {
        return complaints_against_board(lines(ratio, more), "demo_counted");
    };
    const auto number_after = [](const std::string& said, const std::string& words) {
        const std::size_t at = said.find(words);
        REQUIRE(at != std::string::npos);
        return said.substr(at + words.size(),
                           said.find_first_of(", \n", at + words.size()) - at - words.size());
    };
    CHECK(said_of("1e-6").empty());
    const std::string said = said_of("1e-9");
    CHECK(said.find("r.json:3:29: /required/error_ratio: found 1e-09") == 0);
    CHECK(said.find("no verdict \"meets\"") != std::string::npos);
    CHECK(said_of("1e-9", ",\n\"accept_extrapolated\": true").empty());
    // What it advises is enough, and not much more than enough.
    const std::string ratio = number_after(said, "an error ratio of ");
    CHECK(said_of(ratio).empty());
    CHECK_FALSE(said_of(std::to_string(std::stod(ratio) * 1e9 * 0.95) + "e-9").empty());
    const std::string dwell_s = number_after(said, "a dwell_s of ");
    CHECK(said_of("1e-9", ",\n\"dwell_s\": " + dwell_s + ", \"search_error_ratio\": 1e-6").empty());
    CHECK_FALSE(
        said_of("1e-9", ",\n\"dwell_s\": " + std::to_string(std::stod(dwell_s) * 0.95)).empty());
}

TEST_CASE("a budget that does not pay for a single reading is refused, with what one costs") {
    const auto said_of = [](const std::string& budget) {
        return complaints_against_board(dimensions + ",\n" + required + ",\n" + strategy +
                                        ",\n\"dwell_s\": 0.2, \"budget\": {" + budget + "}");
    };
    // At 25 Gb/s 0.2 s is nearest to 2^32 bits, 0.172 s: 1.72 standard readings of 0.1 s, and with
    // 1 ms of settling and 0.2 ms a look 0.173 s of bench time.
    const std::string readings = said_of("\"standard_readings\": 1");
    CHECK(readings.find("/budget/standard_readings: found 1, expected at least 1.72 ") !=
          std::string::npos);
    CHECK(said_of("\"standard_readings\": 1.72").empty());
    const std::string seconds = said_of("\"bench_s\": 0.1");
    CHECK(seconds.find("/budget/bench_s: found 0.1, expected at least 0.173 s ") !=
          std::string::npos);
    CHECK(said_of("\"bench_s\": 0.173").empty());
    CHECK(said_of("\"bench_s\": 0").empty());
}

TEST_CASE("a margin beyond the monitor's range and a dwell beyond its field are refused") {
    const std::string said = complaints_against_board(
        dimensions +
        ",\n\"required\": {\"error_ratio\": 1e-6, \"height_mv\": 9000, \"width_ui\": "
        "0.25},\n" +
        strategy + ",\n\"dwell_s\": 3600");
    CHECK(said.find("r.json:3:48: /required/height_mv: found 9000 mV, expected at most ") !=
          std::string::npos);
    CHECK(said.find("r.json:5:12: /dwell_s: found 3600, expected from ") != std::string::npos);
}

TEST_CASE("an error ratio that the monitor's exponent cannot express is refused") {
    const std::string said = complaints_against_board(dimensions + ",\n" + required + ",\n" +
                                                      strategy + ",\n\"search_error_ratio\": 2e-6");
    CHECK(
        said.find("/search_error_ratio: found 2e-06, expected a power of ten from 1e-9 to 1e-3") !=
        std::string::npos);
}

TEST_CASE("lanes on the command line are parsed, and mistakes said") {
    std::string why;
    CHECK(*parse_lanes("0,2-5", why) == std::vector<std::uint16_t>{0, 2, 3, 4, 5});
    CHECK(*parse_lanes("7", why) == std::vector<std::uint16_t>{7});
    for (const char* text : {"", "a", "5-2", "1,,2", "3-", "-3", "1024", "99999999999", "0-3,2"}) {
        INFO(text);
        why.clear();
        CHECK_FALSE(parse_lanes(text, why));
        CHECK_FALSE(why.empty());
    }
}
