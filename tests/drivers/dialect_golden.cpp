// The frames that drivers/framed.md shows, kept in tests/golden/framed. A change of the dialect
// shows here first. LANEWRIGHT_GOLDEN=rewrite in the environment writes the files anew.

#include <catch2/catch.hpp>
#include <cctype>
#include <cstdlib>
#include <fstream>
#include <sstream>

#include "dialect_desk.hpp"
#include "drivers/dialects/bytes.hpp"
#include "drivers/dialects/frames.hpp"
#include "results.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

const std::string source_dir = LANEWRIGHT_SOURCE_DIR;

std::string file_text(const std::string& path) {
    std::ifstream file(path);
    std::stringstream text;
    text << file.rdbuf();
    return text.str();
}

// Compares with the golden file, or writes it when asked to.
void check_golden(const std::string& name, const Octets& payload) {
    const std::vector<std::byte> bytes = bytes_of(payload);
    const std::string text =
        "payload " + hex_of(bytes, 4096) + "\non line " + hex_of(frame_of(bytes), 4096) + "\n";
    const std::string path = source_dir + "/tests/golden/framed/" + name + ".hex";
    const char* wish = std::getenv("LANEWRIGHT_GOLDEN");
    if (wish != nullptr && std::string(wish) == "rewrite") {
        std::ofstream(path) << text;
    }
    INFO(path);
    CHECK(file_text(path) == text);
}

// The page shows the same bytes; it may break lines.
void check_page(const Octets& payload) {
    std::string page = file_text(source_dir + "/drivers/framed.md"), flat;
    for (const char each : page) {
        const bool space = std::isspace(static_cast<unsigned char>(each)) != 0;
        if (!space) flat += each;
        if (space && !flat.empty() && flat.back() != ' ') flat += ' ';
    }
    CHECK(flat.find("payload " + hex_of(bytes_of(payload), 4096)) != std::string::npos);
}

// The registers of the page's examples.
BoardFile page_board() {
    BoardFile board;
    const auto reg = [&board](const char* name, std::uint32_t address, unsigned high, Role role,
                              Access access) {
        FieldDescription field;
        field.name = "f";
        field.high_bit = high;
        field.role = role;
        field.access = access;
        board.map.registers.push_back({name, address, address < 0x100 ? 32u : 16u, false, {field}});
    };
    reg("ID", 0, 31, Role::none, Access::read_only);
    reg("SCRATCH", 4, 31, Role::scratch, Access::read_write);
    reg("HOLD", 0x105, 0, Role::scratch, Access::read_write);
    reg("CODE", 0x100, 4, Role::tuned, Access::read_write);
    reg("STROBE", 0x104, 0, Role::scratch, Access::self_clearing);
    reg("LOCK", 0x106, 0, Role::none, Access::read_only);
    board.map.lane_count = 1;
    board.dimensions = {{"code", {"CODE", "f"}, PartName::other, {}}};
    return board;
}

Batch reads(const RegisterMap& map) {
    Batch batch;
    REQUIRE(good(map.read(batch, Lane{0}, {"ID", "f"})));
    REQUIRE(good(map.read(batch, Lane{0}, {"SCRATCH", "f"})));
    return batch;
}

Batch apply(const RegisterMap& map) {
    Batch batch;
    using std::chrono::microseconds;
    REQUIRE(good(map.write_declared(batch, Lane{0}, {"HOLD", "f"}, 1)));
    REQUIRE(good(map.write_codes(batch, Lane{0}, Codes{{9}}, std::nullopt)));
    REQUIRE(good(map.write_declared(batch, Lane{0}, {"STROBE", "f"}, 1)));
    REQUIRE(good(map.pause(batch, microseconds(200))));
    REQUIRE(good(map.wait_until(batch, Lane{0}, {"LOCK", "f"}, 1, microseconds(5000))));
    return batch;
}

Octets encoded(const framed::Head& head, const Batch& batch) {
    return octets_of(framed::encode(head, batch));
}

std::optional<BatchReply> content(const Octets& payload, const Batch& batch) {
    const auto message = framed::decode(bytes_of(payload));
    REQUIRE(message);
    const auto* reply = std::get_if<framed::Reply>(&*message);
    REQUIRE(reply != nullptr);
    return framed::decode_content(reply->content, batch);
}

using Results = std::vector<std::optional<std::uint32_t>>;

}  // namespace

TEST_CASE("the host's golden frames are what the host sends") {
    const RegisterMap map(page_board());
    const std::vector<std::pair<std::string, Octets>> sent{
        {"hello", octets_of(framed::encode(framed::Hello{1, desk_session}))},
        {"batch_reads", encoded({0, 1, 0x3B4A, 7}, reads(map))},
        {"batch_apply", encoded({3, 258, 0x3B4A, 300}, apply(map))},
    };
    for (const auto& [name, payload] : sent) {
        check_golden(name, payload);
        check_page(payload);
    }
}

TEST_CASE("the board's golden frames are read as the page says") {
    const RegisterMap map(page_board());
    const Octets answer{0x81, 1,    1,    0x4A, 0x3B, 0x2C, 0x1D, 7,    0, 0x80,
                        8,    0x10, 0x80, 2,    0x80, 0x8E, 0xCE, 0x1C, 4, 0};
    const Octets values{0x82, 0, 1, 0, 0x4A, 0x3B, 7, 0, 0xB8, 0xA4, 0xE9, 0xFA, 4, 0};
    const Octets applied{0x82, 3, 2, 1, 0x4A, 0x3B, 0xAC, 2, 0, 1, 9, 1};
    const Octets expired{0x82, 3, 2, 1, 0x4A, 0x3B, 0xAC, 2, 4, 4, 1, 9, 0};
    const Octets refused{0x83, 3, 2, 1, 0x4A, 0x3B, 0xAD, 2, 1};
    check_golden("hello_answer", answer);
    check_golden("reply_reads", values);
    check_golden("reply_apply", applied);
    check_golden("reply_expired", expired);
    check_golden("error_boot", refused);
    for (const Octets& each : {answer, values, applied, expired, refused}) check_page(each);

    const auto hello = framed::decode(bytes_of(answer));
    REQUIRE(hello);
    const auto& limits = std::get<framed::HelloAnswer>(*hello);
    CHECK(limits.boot == 7);
    CHECK(limits.largest_payload == 1024);
    CHECK(limits.longest_wait_us == 60000000);
    CHECK(content(values, reads(map))->results == Results{0x4F5A5238u, 0u});
    const Results all{1u, 9u, std::nullopt, std::nullopt, 1u};
    CHECK(content(applied, apply(map))->results == all);
    CHECK(content(applied, apply(map))->outcome == Outcome::done);
    CHECK(content(expired, apply(map))->outcome == Outcome::wait_expired);
    CHECK(content(expired, apply(map))->failed_at == 4);
    const auto error = framed::decode(bytes_of(refused));
    REQUIRE(error);
    CHECK(std::get<framed::ErrorReply>(*error).error == framed::Error::wrong_boot);
    CHECK(std::get<framed::ErrorReply>(*error).head.boot == 301);
    CHECK(std::get<framed::ErrorReply>(*error).head.count == 258);
}

TEST_CASE("a counted look costs at most 50 bytes of line, request and reply together") {
    // Write and read back phase and offset, start, wait until done, read two 32-bit counters.
    BoardFile board;
    const auto reg = [&board](const char* name, std::uint32_t address, unsigned width,
                              unsigned high, Role role, Access access) {
        FieldDescription field;
        field.name = "f";
        field.high_bit = high;
        field.role = role;
        field.access = access;
        board.map.registers.push_back({name, address, width, false, {field}});
    };
    reg("PHASE", 0x140, 16, 6, Role::scratch, Access::read_write);
    reg("OFFSET", 0x141, 16, 8, Role::scratch, Access::read_write);
    reg("START", 0x142, 16, 0, Role::scratch, Access::self_clearing);
    reg("BUSY", 0x143, 16, 0, Role::none, Access::read_only);
    reg("BITS", 0x144, 32, 31, Role::none, Access::read_only);
    reg("ERRORS", 0x145, 32, 31, Role::none, Access::read_only);
    const RegisterMap map(board);
    Batch batch;
    Octets reply{0x82, 15, 0xFF, 0xFF, 0xFF, 0xFF, 0xFF, 0xFF, 0xFF, 0xFF, 0x0F, 0};
    constexpr int looks = 16;
    for (int look = 0; look < looks; ++look) {
        REQUIRE(good(map.write_declared(batch, Lane{0}, {"PHASE", "f"}, 0x7F)));
        REQUIRE(good(map.write_declared(batch, Lane{0}, {"OFFSET", "f"}, 0x1FF)));
        REQUIRE(good(map.write_declared(batch, Lane{0}, {"START", "f"}, 1)));
        REQUIRE(good(
            map.wait_until(batch, Lane{0}, {"BUSY", "f"}, 0, std::chrono::microseconds(1000000))));
        REQUIRE(good(map.read(batch, Lane{0}, {"BITS", "f"})));
        REQUIRE(good(map.read(batch, Lane{0}, {"ERRORS", "f"})));
        // The longest values there are: read-backs, the wait's, and two full counters.
        reply.insert(reply.end(), {0x7F, 0xFF, 0x03, 0x00});
        for (int i = 0; i < 2; ++i) reply.insert(reply.end(), {0xFF, 0xFF, 0xFF, 0xFF, 0x0F});
    }
    REQUIRE(content(reply, batch));
    const Octets request = encoded({15, 0xFFFF, 0xFFFF, 0xFFFFFFFF}, batch);
    const std::size_t line = framed_by_hand(request).size() + framed_by_hand(reply).size();
    INFO(line << " bytes for " << looks << " looks");
    CHECK(line <= 50 * looks);
    CHECK(line >= 20 * looks);  // less would mean that something was left out
}
