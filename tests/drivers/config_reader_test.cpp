#include <unistd.h>

#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>
#include <string>

#include "drivers/config/json_reader.hpp"

using namespace lanewright;

namespace {

std::string complaints_of_text(const std::string& text) {
    Complaints complaints;
    static_cast<void>(Document::parse(text, "f.json", complaints));
    return complaints.text();
}

std::string complaints_of_file(const std::string& path) {
    Complaints complaints;
    REQUIRE_FALSE(Document::load(path, complaints));
    return complaints.text();
}

}  // namespace

TEST_CASE("a syntax error names line, column, what was found and what was expected") {
    CHECK(complaints_of_text("{\"a\": 1\n  \"b\": 2}") ==
          "f.json:2:3: found \"b\", expected ',' or '}'; is a comma missing before it?\n");
    CHECK(complaints_of_text("{\n \"a\":,}") == "f.json:2:6: found ',', expected a JSON value\n");
    CHECK(complaints_of_text("[1,\n2,\n]") ==
          "f.json:3:1: found ']', expected a JSON value; remove the comma before it\n");
    CHECK(complaints_of_text("{\"a\" 1}") == "f.json:1:6: found '1', expected ':' after the key\n");
    CHECK(complaints_of_text("{} x") == "f.json:1:4: found 'x', expected the end of the file\n");
    CHECK(complaints_of_text("") ==
          "f.json:1:1: found the end of the file, expected a JSON value; is a closing bracket, "
          "brace or quote missing?\n");
}

TEST_CASE("what people often write in place of JSON gets a hint") {
    CHECK(complaints_of_text("{'a': 1}") ==
          "f.json:1:2: found ''a'', expected a key in double quotes; JSON strings stand between "
          "double quotes\n");
    CHECK(complaints_of_text("{\n// a\n}") ==
          "f.json:2:1: found '//', expected a key in double quotes; JSON has no comments; use a "
          "\"description\"\n");
    CHECK(complaints_of_text("[True]") ==
          "f.json:1:2: found 'True', expected a JSON value; write true, false or null\n");
    CHECK(complaints_of_text("[0x12]") ==
          "f.json:1:3: found 'x12', expected ',' or ']'; write hexadecimal numbers in double "
          "quotes\n");
}

TEST_CASE("a key written twice is a complaint at the second one, and the first one counts") {
    Complaints complaints;
    const auto document = Document::parse("{\"a\": 1,\n \"a\": 2}", "f.json", complaints);
    REQUIRE(document);
    CHECK(complaints.text() ==
          "f.json:2:2: /a: found a second \"a\", expected each key once; remove one of the two\n");
    CHECK(document->root().object().integer("a") == 1);
}

TEST_CASE("numbers that a double or an integer cannot hold are refused with their place") {
    CHECK(complaints_of_text("[1,\n NaN]") ==
          "f.json:2:2: found 'NaN', expected a JSON value; JSON has only finite numbers\n");
    CHECK(complaints_of_text("[1e999]") ==
          "f.json:1:2: found '1e999', expected a finite number; the number is too large\n");
    CHECK(complaints_of_text("{\"n\": 18446744073709551616}") ==
          "f.json:1:7: /n: found 18446744073709551616, expected an integer from "
          "-9223372036854775808 to 9223372036854775807\n");
}

TEST_CASE("text that is not valid UTF-8 or holds a zero byte is refused at that byte") {
    CHECK(complaints_of_text("{\"name\": \"a\xC3(\"}") ==
          "f.json:1:12: found the byte 0xC3, expected valid UTF-8\n");
    CHECK(complaints_of_text(std::string("{}\0 anything", 12)) ==
          "f.json:1:3: found the byte 0x00, expected text; is it a JSON file?\n");
}

TEST_CASE("columns count characters, and a byte order mark counts for none") {
    CHECK(complaints_of_text("{\"\xC3\xA9\xC3\xA9\": x}") ==
          "f.json:1:8: found 'x', expected a JSON value\n");
    CHECK(complaints_of_text("\xEF\xBB\xBF[x]") ==
          "f.json:1:2: found 'x', expected a JSON value\n");
}

TEST_CASE("brackets nested deeper than 64 levels are refused, 64 are not") {
    const std::string open(64, '['), close(64, ']');
    CHECK(complaints_of_text(open + close).empty());
    CHECK(complaints_of_text("[" + open + close + "]") ==
          "f.json:1:65: found more than 64 levels of brackets, expected at most 64\n");
}

TEST_CASE("files that are missing, folders, devices or too large are refused without hanging") {
    CHECK(complaints_of_file("/no/such/file.json") ==
          "/no/such/file.json: found No such file or directory, expected a readable JSON file\n");
    CHECK(complaints_of_file("/tmp") == "/tmp: found a directory, expected a JSON file\n");
    CHECK(complaints_of_file("/dev/zero") ==
          "/dev/zero: found a pipe or device, expected a regular file\n");

    const auto path = std::filesystem::temp_directory_path() /
                      ("lanewright_config_" + std::to_string(getpid()) + ".json");
    std::ofstream(path) << "{}";
    std::filesystem::resize_file(path, (std::uintmax_t{16} << 20) + 1);
    CHECK(complaints_of_file(path.string()) ==
          path.string() + ": found more than 16 MiB, expected a JSON file of at most 16 MiB\n");
    std::filesystem::remove(path);
}

TEST_CASE("getters complain of type and range with pointer and place, and all at once") {
    Complaints complaints;
    const auto document = Document::parse(
        "{\n  \"lanes\": {\"count\": \"eight\", \"a/b~c\": 0},\n  \"gain\": 1.5,\n  \"kind\": "
        "\"tpc\"\n}",
        "board.json", complaints);
    REQUIRE(document);
    const Object top = document->root().object();
    const Object lanes = top.object("lanes");
    CHECK(lanes.integer("count", {1, 1024}) == 1);
    CHECK(lanes.number("a/b~c", {.above = 0}) == 0);
    CHECK(top.integer("gain") == 0);
    CHECK(top.word("kind", {"serial", "tcp"}) == 0);
    CHECK(top.text("name").empty());
    CHECK(complaints.text() ==
          "board.json:1:1: found no \"name\", expected this key, it is required\n"
          "board.json:2:22: /lanes/count: found \"eight\", expected an integer from 1 to 1024; "
          "write a number without quotes, or a hexadecimal one like \"0x1F4\"\n"
          "board.json:2:40: /lanes/a~1b~0c: found 0, expected a number above 0\n"
          "board.json:3:11: /gain: found 1.5, expected an integer\n"
          "board.json:4:11: /kind: found \"tpc\", expected one of \"serial\", \"tcp\"; did you "
          "mean \"tcp\"?\n");
}

TEST_CASE("one mistake gives one complaint, however much was to be read below it") {
    Complaints complaints;
    const auto document = Document::parse("{\"a\": 3}", "f.json", complaints);
    REQUIRE(document);
    const Object a = document->root().object().object("a");
    static_cast<void>(a.text("b"));
    static_cast<void>(a.list("c").numbers());
    a.finish();
    CHECK(complaints.all().size() == 1);
}

TEST_CASE("an unknown key is a complaint at the key with the nearest absent key as a hint") {
    Complaints complaints;
    const auto document =
        Document::parse("{\"height\": 1,\n   \"widht\": 2}", "f.json", complaints);
    REQUIRE(document);
    const Object top = document->root().object();
    static_cast<void>(top.number_or("height", 0));
    static_cast<void>(top.number_or("width", 0));
    top.finish();
    CHECK(complaints.text() ==
          "f.json:2:4: /widht: found an unknown key \"widht\", expected one of \"height\", "
          "\"width\"; did you mean \"width\"?\n");
}

TEST_CASE("integers are read from decimal, whole floating and quoted hexadecimal numbers") {
    Complaints complaints;
    const auto document = Document::parse("[12, 8.0, \"0x1F4\", \"0XfF\"]", "f.json", complaints);
    REQUIRE(document);
    const List list = document->root().list();
    CHECK(list.at(0).integer() == 12);
    CHECK(list.at(1).integer() == 8);
    CHECK(list.at(2).integer() == 500);
    CHECK(list.at(3).integer() == 255);
    CHECK_FALSE(complaints.any());
    CHECK(list.at(9).is_null());
}

TEST_CASE("the nearest word allows one letter in three to differ and swapped neighbours") {
    CHECK(nearest_word("hieght", {"width", "height"}) == "height");
    CHECK(nearest_word("Height", {"width", "height"}) == "height");
    CHECK(nearest_word("colour", {"width", "height"}).empty());
    CHECK(nearest_word("", {"a"}).empty());
    CHECK(nearest_word("x", {"a"}).empty());
}

TEST_CASE("places are known by pointer, escaped as RFC 6901 section 3 says") {
    Complaints complaints;
    const auto document = Document::parse("{\"a\": [1,\n  {\"x/y\": 2}]}", "f.json", complaints);
    REQUIRE(document);
    const auto places = document->places();
    REQUIRE(places.contains("/a/1/x~1y"));
    CHECK(places.at("/a/1/x~1y").line == 2);
    CHECK(places.at("/a/1/x~1y").column == 11);
    CHECK(places.at("").column == 1);
}
