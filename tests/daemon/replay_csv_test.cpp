// The reader of comma-separated values: RFC 4180, and what other programs make of it.

#include <algorithm>
#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>
#include <iterator>

#include "adapt/stats/random.hpp"
#include "daemon/replay/csv.hpp"
#include "daemon/replay/csv_cells.hpp"

using namespace lanewright;

namespace {

std::vector<CsvRow> rows_of(std::string_view text, char separator = ',') {
    CsvReader reader(text, separator);
    std::vector<CsvRow> out;
    CsvRow row;
    while (reader.next(row)) out.push_back(row);
    return out;
}

std::vector<std::string> corpus() {
    std::vector<std::string> out;
    for (const auto& entry :
         std::filesystem::directory_iterator(LANEWRIGHT_SOURCE_DIR "/tests/corpus/csv")) {
        std::ifstream in(entry.path(), std::ios::binary);
        out.emplace_back(std::istreambuf_iterator<char>(in), std::istreambuf_iterator<char>());
    }
    std::sort(out.begin(), out.end());
    return out;
}

using Fields = std::vector<std::string>;

}  // namespace

TEST_CASE("Fields are read as RFC 4180 has them") {
    // The examples of RFC 4180, section 2, rules 1, 2, 5, 6 and 7.
    CHECK(rows_of("aaa,bbb,ccc\r\nzzz,yyy,xxx\r\n")[1].fields == Fields{"zzz", "yyy", "xxx"});
    CHECK(rows_of("aaa,bbb,ccc\r\nzzz,yyy,xxx").size() == 2);
    CHECK(rows_of("\"aaa\",\"bbb\",\"ccc\"\r\n")[0].fields == Fields{"aaa", "bbb", "ccc"});
    const auto broken = rows_of("\"aaa\",\"b\r\nbb\",\"ccc\"\r\nzzz,yyy,xxx");
    REQUIRE(broken.size() == 2);
    CHECK(broken[0].fields == Fields{"aaa", "b\r\nbb", "ccc"});
    CHECK(broken[1].line == 3);
    CHECK(rows_of("\"aaa\",\"b\"\"bb\",\"ccc\"")[0].fields == Fields{"aaa", "b\"bb", "ccc"});
}

TEST_CASE("A byte order mark, other separators and empty lines are passed over") {
    const auto rows = rows_of(
        "\xEF\xBB\xBF"
        "a;b\n\n\r\n1;\"2;3\"\n",
        ';');
    REQUIRE(rows.size() == 2);
    CHECK(rows[0].fields == Fields{"a", "b"});
    CHECK(rows[1].fields == Fields{"1", "2;3"});
    CHECK(rows[1].line == 4);
    CHECK(rows_of("a,,\n")[0].fields == Fields{"a", "", ""});
    CHECK(rows_of("").empty());
    CHECK(rows_of("\n\n").empty());
}

TEST_CASE("A row that is not well formed has a fault, and the next one is read") {
    const std::string long_field(40'000, 'x');
    const std::string many(5'000, ',');
    for (const std::string& bad :
         {std::string("a\"b,c"), std::string("\"a\"b,c"), std::string("a,\"never closed"),
          std::string("caf\xE9,1"), std::string("a\0b,1", 5), "1," + long_field, many,
          "\"" + long_field + "\",1", std::string("a\rb,c"), std::string("\xED\xA0\x80,1")}) {
        const auto rows = rows_of("h,i\n" + bad + "\n7,8\n");
        INFO(bad.substr(0, 40));
        REQUIRE(rows.size() == 3);
        CHECK(rows[0].fault.empty());
        CHECK_FALSE(rows[1].fault.empty());
        CHECK(rows[1].line == 2);
        CHECK(rows[2].fault.empty());
        CHECK(rows[2].fields == Fields{"7", "8"});
        CHECK(rows[2].line == 3);
    }
}

TEST_CASE("Numbers are taken in one notation only") {
    const CsvHeader header{{"x", 0}};
    const auto number = [&](const std::string& cell) {
        const std::vector<std::string> fields{cell};
        return Cells(header, fields).number("x");
    };
    CHECK(number("-12.5") == -12.5);
    CHECK(number(" 1e-6\t") == 1e-6);
    CHECK(number("+3") == 3);
    for (const char* bad : {"", "nan", "NaN", "inf", "-Infinity", "1,234", "1 234", "1'234", "0,5",
                            "1_000", "0x10", "12 mV", "1e999", "++1", "--1", "1.2.3", "."}) {
        INFO(bad);
        CHECK_THROWS_AS(number(bad), BadRow);
    }
    CHECK_THROWS_WITH(number("1,234"), Catch::Contains("thousands separators"));
    const std::vector<std::string> fields{"7.0"};
    CHECK_THROWS_AS(Cells(header, fields).integer("x", 0, 10), BadRow);
}

TEST_CASE("What is written with quotes is read back, whatever is in it") {
    const char letters[] = {'a', '"', ',', '\n', '\r', ' ', ';'};
    Random random({11, 0, 0, 0});
    for (int trial = 0; trial < 500; ++trial) {
        std::vector<Fields> wanted(1 + random.below(4));
        std::string text;
        for (Fields& row : wanted) {
            for (std::uint64_t i = 1 + random.below(4); i > 0; --i) {
                std::string field;
                for (std::uint64_t k = random.below(6); k > 0; --k) {
                    field += letters[random.below(std::size(letters))];
                }
                text += (row.empty() ? "\"" : ",\"");
                for (const char c : field) text += c == '"' ? "\"\"" : std::string(1, c);
                text += '"';
                row.push_back(std::move(field));
            }
            text += random.below(2) == 0 ? "\n" : "\r\n";
        }
        const auto rows = rows_of(text);
        REQUIRE(rows.size() == wanted.size());
        for (std::size_t i = 0; i < rows.size(); ++i) CHECK(rows[i].fields == wanted[i]);
    }
}

TEST_CASE("Damaged files neither crash nor hang the reader and no line goes missing") {
    const auto files = corpus();
    REQUIRE(files.size() >= 5);
    Random random({12, 0, 0, 0});
    for (const std::string& file : files) {
        for (int trial = 0; trial < 200; ++trial) {
            std::string text = file;
            for (std::uint64_t i = random.below(8); i > 0 && !text.empty(); --i) {
                const std::size_t at = random.below(text.size());
                if (random.below(3) == 0) {
                    text.erase(at, random.below(20));
                } else {
                    text[at] = static_cast<char>(random.bits());
                }
            }
            std::size_t last = 0;
            for (const CsvRow& row : rows_of(text)) {
                CHECK(row.line > last);
                last = row.line;
                CHECK((!row.fault.empty() || !row.fields.empty()));
            }
            const auto lines =
                static_cast<std::size_t>(std::count(text.begin(), text.end(), '\n')) + 1;
            CHECK(last <= lines);
        }
    }
}

TEST_CASE("A file of nothing but stray quotes is through in no time") {
    std::string text;
    for (int i = 0; i < 20'000; ++i) text += "\"x,1\ny\"\n";
    std::size_t count = 0;
    CsvReader reader(text);
    CsvRow row;
    while (reader.next(row)) ++count;
    CHECK(count >= 10'000);
}
