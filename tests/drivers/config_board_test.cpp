#include <catch2/catch.hpp>
#include <string>
#include <variant>
#include <vector>

#include "drivers/config/board_file.hpp"

using namespace lanewright;

namespace {

const std::string source_dir = LANEWRIGHT_SOURCE_DIR;

BoardFile load(const std::string& path) {
    Complaints complaints;
    auto board = load_board_file(source_dir + "/" + path, complaints);
    INFO(complaints.text());
    REQUIRE(board);
    return *board;
}

std::vector<std::string> texts(const std::vector<FieldName>& names) {
    std::vector<std::string> out;
    for (const FieldName& name : names) out.push_back(name.text());
    return out;
}

}  // namespace

TEST_CASE("the demo's board file is read whole") {
    const BoardFile board = load("configs/boards/demo.json");
    CHECK(board.map.lane_count == 8);
    CHECK(board.dimensions.size() == 4);
    CHECK(board.monitor.four_edges);
    CHECK(board.monitor.shared_by.size() == 4);
    CHECK(board.identity.simulated == FieldName{"BUILD", "model"});
    CHECK(board.strobe);
    CHECK(board.dialect.patience_s == 20);
    REQUIRE(board.apply.size() == 6);
    const auto& wait = std::get<WaitStep>(board.apply[5]);
    CHECK(wait.lock);
    CHECK(wait.timeout_ms == 5);
    CHECK(std::get<Parameter>(std::get<WriteStep>(board.monitor.sequence[0]).value) ==
          Parameter::ordinal);
}

TEST_CASE("a field's mask and limits follow from its bits") {
    const BoardFile board = load("configs/boards/demo.json");
    const FieldDescription* ratio = board.map.find(FieldName{"MON_SETUP", "ratio_exponent"});
    REQUIRE(ratio != nullptr);
    CHECK(ratio->mask() == 0x0F00);
    CHECK(ratio->lowest_allowed() == 3);
    CHECK(ratio->highest_allowed() == 9);
    const FieldDescription* note = board.map.find(FieldName{"NOTE", "value"});
    REQUIRE(note != nullptr);
    CHECK(note->mask() == 0xFFFFFFFF);
    CHECK(board.map.find(FieldName{"NOTE", "nothing"}) == nullptr);
}

TEST_CASE("saved fields are the tuned ones in order, then those that sequences write") {
    const BoardFile board = load("configs/boards/demo.json");
    CHECK(texts(fields_to_save(board)) ==
          std::vector<std::string>{"EQ_R1.code", "EQ_R2.code", "EQ_C1.code", "EQ_C2.code",
                                   "RX_CTL.hold_loops", "NOTE.value", "MON_SETUP.ratio_exponent",
                                   "MON_SETUP.dwell_log2"});
}

TEST_CASE("a monitor that reads height and width has no four edges") {
    const BoardFile board = load("tests/corpus/boards/good/height_and_width.json");
    CHECK_FALSE(board.monitor.four_edges);
    const auto& combine = std::get<CombineStep>(board.monitor.sequence[5]);
    CHECK(combine.high == "hi");
    CHECK(combine.low == "lo");
    CHECK(combine.shift == 8);
    CHECK(combine.as == "height");
}

TEST_CASE("a serial link keeps what the file leaves open as it is") {
    const BoardFile board = load("tests/corpus/boards/good/serial_one_lane.json");
    const auto& serial = std::get<SerialLinkDescription>(board.link);
    CHECK(serial.baud == 921600);
    CHECK(serial.dtr == false);
    CHECK(serial.rts == true);
    CHECK(serial.hang_up_on_close);
    CHECK_FALSE(board.strobe);
    CHECK(board.dialect.patience_s == 5);
}

TEST_CASE("a dialect that the caller does not know is refused") {
    Complaints complaints;
    const std::string path = source_dir + "/tests/corpus/boards/good/small.json";
    CHECK_FALSE(load_board_file(path, complaints, {"spoken"}));
    CHECK(complaints.text() ==
          path + ":5:23: /dialect/name: found \"framed\", expected \"spoken\"\n");
}

TEST_CASE("links are parsed and written back alike") {
    std::string why;
    const LinkDescription tcp = TcpLinkDescription{"a", 1};
    for (const char* text : {"tcp:bench-3:40125", "tcp:[::1]:80", "serial:/dev/ttyUSB0"}) {
        const auto link = parse_link(text, tcp, why);
        REQUIRE(link);
        CHECK(text_of(*link) == text);
    }
}

TEST_CASE("a serial path on the command line keeps the file's settings") {
    SerialLinkDescription base;
    base.baud = 115200;
    base.dtr = false;
    std::string why;
    const auto link = parse_link("serial:/tmp/x", base, why);
    REQUIRE(link);
    CHECK(std::get<SerialLinkDescription>(*link).baud == 115200);
    CHECK(std::get<SerialLinkDescription>(*link).dtr == false);
}

TEST_CASE("a link that is none says what was expected") {
    const LinkDescription base = TcpLinkDescription{};
    for (const auto& [text, expected] : std::vector<std::pair<std::string, std::string>>{
             {"tcp:host", "no port in \"tcp:host\""},
             {"tcp::80", "no host in \"tcp::80\""},
             {"tcp:::1:80", "an IPv6 address in brackets"},
             {"tcp:host:0", "port \"0\", expected 1 to 65535"},
             {"tcp:host:65536", "port \"65536\", expected 1 to 65535"},
             {"tcp:host:80x", "port \"80x\", expected 1 to 65535"},
             {"serial:", "no path in \"serial:\""},
             {"udp:host:1", "link \"udp:host:1\", expected tcp:HOST:PORT"},
             {"", "link \"\", expected tcp:HOST:PORT"}}) {
        std::string why;
        INFO(text);
        CHECK_FALSE(parse_link(text, base, why));
        CHECK(why.find(expected) != std::string::npos);
    }
}
