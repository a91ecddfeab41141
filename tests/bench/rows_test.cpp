#include "tests/bench/rows.hpp"

#include <catch2/catch.hpp>
#include <cmath>
#include <limits>
#include <nlohmann/json.hpp>
#include <sstream>
#include <string>

using namespace lanewright::bench;

namespace {

Row row_of(double value, Better better, std::optional<double> must) {
    Row row;
    row.name = "a row";
    row.value = value;
    row.unit = "s";
    row.better = better;
    row.must = must;
    return row;
}

}  // namespace

TEST_CASE("a row is missed on the wrong side of its must only") {
    CHECK_FALSE(missed(row_of(5, Better::less, 5)));
    CHECK(missed(row_of(5.1, Better::less, 5)));
    CHECK_FALSE(missed(row_of(5, Better::more, 5)));
    CHECK(missed(row_of(4.9, Better::more, 5)));
    CHECK_FALSE(missed(row_of(1e9, Better::less, {})));
    CHECK(missed(row_of(std::numeric_limits<double>::quiet_NaN(), Better::less, 5)));
}

TEST_CASE("a row is one JSON line with all its keys, and what is not finite is null") {
    Row row = row_of(std::numeric_limits<double>::infinity(), Better::more, 3);
    row.n = 7;
    row.seed = 9;
    const std::string line = json_line(row, 0.5, "abc");
    CHECK(line.find('\n') == std::string::npos);
    const auto read = nlohmann::json::parse(line);
    CHECK(read.size() == 10);
    CHECK(read.at("value").is_null());
    CHECK(read.at("better") == "more");
    CHECK(read.at("must") == 3);
    CHECK(read.at("aim").is_null());
    CHECK(read.at("n") == 7);
    CHECK(read.at("seed") == 9);
    CHECK(read.at("load") == 0.5);
    CHECK(read.at("commit") == "abc");
}

TEST_CASE("the table says MISSED, counts it, and is at most 80 columns wide") {
    Row longest = row_of(-1.23456e-100, Better::less, -1.23456e-99);
    longest.name = std::string(200, 'n');
    longest.unit = std::string(50, 'u');
    longest.aim = -2.34567e-100;
    const std::string text = table({row_of(1, Better::less, 2), row_of(3, Better::less, 2)});
    CHECK(text.find("MISSED") != std::string::npos);
    CHECK(text.find("MISSED") == text.rfind("MISSED"));
    CHECK(text.find("2 rows, 1 missed") != std::string::npos);
    std::istringstream lines(text + table({longest}));
    for (std::string line; std::getline(lines, line);) CHECK(line.size() <= 80);
}

TEST_CASE("rows print as they come, a calibration first, and a missed must keeps the status 0") {
    std::ostringstream out;
    Rows rows(out);
    rows.row(row_of(3, Better::less, 2));
    const std::string before_table = out.str();
    CHECK(rows.finish() == 0);
    std::istringstream lines(before_table);
    std::string line;
    REQUIRE(std::getline(lines, line));
    const auto calibration = nlohmann::json::parse(line);
    CHECK(calibration.at("name").get<std::string>().find("calibration") == 0);
    CHECK(calibration.at("value").get<double>() > 0);
    REQUIRE(std::getline(lines, line));
    CHECK(nlohmann::json::parse(line).at("value") == 3);
    CHECK(out.str().find("2 rows, 1 missed") != std::string::npos);
}
