#include <catch2/catch.hpp>

#include "drivers/registers/register_map.hpp"
#include "results.hpp"
#include "small_board.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

Codes codes(std::int32_t a, std::int32_t b) {
    return {{a, b}};
}

const Write& write_at(const Batch& batch, std::size_t at) {
    return std::get<Write>(batch.operations()[at]);
}

}  // namespace

TEST_CASE("fields of a lane lie at the lane's base plus lane times stride") {
    const RegisterMap map(small_board());
    const FieldPlace place = map.place(Lane{1}, {"EQ", "b"}).value();
    CHECK(place.address == 0x140);
    CHECK(place.mask == 0xF0);
    CHECK(place.shift == 4);
    CHECK(place.width_bits == 16);
    CHECK(place.value_in(0xABC5) == 0xC);
    CHECK(map.place(Lane{1}, {"ID", "value"})->address == 0);
}

TEST_CASE("an unknown lane or field is refused and nothing is added") {
    const RegisterMap map(small_board());
    Batch batch;
    const auto lane = map.read(batch, Lane{2}, {"EQ", "a"});
    REQUIRE(!lane);
    CHECK(lane.error().cause == Cause::not_allowed);
    CHECK(lane.error().what == "the board has no lane 2, only 0 to 1");
    CHECK(!map.read(batch, Lane{0}, {"EQ", "c"}));
    CHECK(!map.read(batch, Lane{0}, {"QE", "a"}));
    CHECK(batch.empty());
}

TEST_CASE("codes are written as masked fields, each with read-back, and may be repeated") {
    const RegisterMap map(small_board());
    Batch batch;
    REQUIRE(good(map.write_codes(batch, Lane{1}, codes(9, 3), std::nullopt)));
    REQUIRE(batch.size() == 2);
    CHECK(write_at(batch, 0) == Write{0x140, 0x0F, 0x09, 16, true});
    CHECK(write_at(batch, 1) == Write{0x140, 0xF0, 0x30, 16, true});
    CHECK(batch.repeatable());
}

TEST_CASE("a write joins the last one only where that is to other bits of the same register") {
    const RegisterMap map(small_counted_board());
    Batch batch;
    REQUIRE(good(map.write_joined(batch, Lane{1}, {"POINT", "phase"}, 70)));
    REQUIRE(good(map.write_joined(batch, Lane{1}, {"POINT", "offset"}, 300)));
    REQUIRE(batch.size() == 1);
    CHECK(write_at(batch, 0) == Write{0x14D, 0xFFFF, 70 << 9 | 300, 32, true});
    REQUIRE(good(map.write_joined(batch, Lane{1}, {"POINT", "offset"}, 301)));
    CHECK(batch.size() == 2);  // the same bits once more
    REQUIRE(good(map.write_joined(batch, Lane{0}, {"POINT", "phase"}, 1)));
    CHECK(batch.size() == 3);  // another lane's register
    const auto refused = map.write_joined(batch, Lane{0}, {"POINT", "offset"}, 512);
    REQUIRE(!refused);
    CHECK(refused.error().cause == Cause::not_allowed);
    CHECK(write_at(batch, 2) == Write{0x10D, 0xFE00, 1 << 9, 32, true});
    REQUIRE(good(map.write_declared(batch, Lane{0}, {"COUNT", "go"}, 1)));
    REQUIRE(good(map.write_joined(batch, Lane{0}, {"POINT", "offset"}, 2)));
    CHECK(batch.size() == 5);  // something stands between
}

TEST_CASE("codes outside their limits or of the wrong number are refused by name and limit") {
    const RegisterMap map(small_board());
    Batch batch;
    const auto high = map.write_codes(batch, Lane{0}, codes(16, 0), std::nullopt);
    REQUIRE(!high);
    CHECK(high.error().cause == Cause::not_allowed);
    CHECK(high.error().what == "EQ.a = 16 is outside its limits 0 to 15");
    CHECK(high.error().lane == Lane{0});
    CHECK(!map.write_codes(batch, Lane{0}, codes(-1, 0), std::nullopt));
    CHECK(!map.write_codes(batch, Lane{0}, Codes{{1}}, std::nullopt));
    CHECK(batch.empty());
}

TEST_CASE("a forbidden combination is refused with the board file's reason") {
    const RegisterMap map(small_board());
    Batch batch;
    const auto both = map.write_codes(batch, Lane{0}, codes(15, 15), std::nullopt);
    REQUIRE(!both);
    CHECK(both.error().what == "the board file forbids a=15,b=15: too much load");
    CHECK(good(map.write_codes(batch, Lane{0}, codes(15, 14), std::nullopt)));
}

TEST_CASE("only declared control fields and scratch fields can be written by name") {
    const RegisterMap map(small_board());
    Batch batch;
    CHECK(good(map.write_declared(batch, Lane{0}, {"CTL", "hold"}, 1)));
    CHECK(good(map.write_declared(batch, Lane{0}, {"SCRATCH", "value"}, 0xFFFFFFFF)));
    CHECK(batch.size() == 2);
    for (const FieldName& name :
         {FieldName{"CTL", "trim"}, FieldName{"CTL", "spare"}, FieldName{"EQ", "a"},
          FieldName{"STATUS", "lock"}, FieldName{"ID", "value"}}) {
        INFO(name.text());
        const auto refused = map.write_declared(batch, Lane{0}, name, 0);
        REQUIRE(!refused);
        CHECK(refused.error().cause == Cause::not_allowed);
    }
    const auto low = map.write_declared(batch, Lane{0}, {"SETUP", "dwell_log2"}, 9);
    REQUIRE(!low);
    CHECK(low.error().what == "SETUP.dwell_log2 = 9 is outside its limits 10 to 40");
    CHECK(batch.size() == 2);
}

TEST_CASE("a self-clearing write is not read back and makes its batch unrepeatable") {
    const RegisterMap map(small_board());
    Batch batch;
    REQUIRE(good(map.write_declared(batch, Lane{0}, {"CTL", "hold"}, 1)));
    CHECK(batch.repeatable());
    REQUIRE(good(map.write_declared(batch, Lane{0}, {"LOAD", "strobe"}, 1)));
    CHECK(!batch.repeatable());
    CHECK(!write_at(batch, 1).read_back);
    CHECK(RegisterMap::part_of(batch, 0, 1).repeatable());
    CHECK(!RegisterMap::part_of(batch, 1, 1).repeatable());
}

TEST_CASE("a write-only field is not read back, cannot be read, and may be written again") {
    const RegisterMap map(small_board());
    Batch batch;
    REQUIRE(good(map.write_declared(batch, Lane{0}, {"KEY", "value"}, 5)));
    CHECK(!write_at(batch, 0).read_back);
    CHECK(batch.repeatable());
    CHECK(!map.read(batch, Lane{0}, {"KEY", "value"}));
    CHECK(!map.wait_until(batch, Lane{0}, {"KEY", "value"}, 5, std::chrono::microseconds(1)));
}

TEST_CASE("waits and pauses keep their bounds and add up to the batch's longest time") {
    const RegisterMap map(small_board());
    Batch batch;
    using std::chrono::microseconds;
    REQUIRE(good(map.wait_until(batch, Lane{0}, {"STATUS", "lock"}, 1, microseconds(5000))));
    REQUIRE(good(map.pause(batch, microseconds(200))));
    CHECK(batch.longest() == microseconds(5200));
    CHECK(!map.wait_until(batch, Lane{0}, {"STATUS", "lock"}, 2, microseconds(1)));
    CHECK(!map.wait_until(batch, Lane{0}, {"STATUS", "lock"}, 1, microseconds(-1)));
    CHECK(!map.pause(batch, microseconds(0x100000000)));
    CHECK(batch.size() == 2);
}

TEST_CASE("without a strobe the order of writes passes no forbidden combination") {
    BoardFile board = small_board();
    board.strobe = false;
    board.forbidden = {{{{"a", 8, 15}, {"b", 0, 7}}, "overload"}};
    const RegisterMap map(board);
    Batch up, down;
    // From (0, 0) to (12, 12) the board file's order would pass (12, 0), which is forbidden.
    REQUIRE(good(map.write_codes(up, Lane{0}, codes(12, 12), codes(0, 0))));
    CHECK(write_at(up, 0) == Write{0x100, 0xF0, 0xC0, 16, true});
    CHECK(write_at(up, 1) == Write{0x100, 0x0F, 0x0C, 16, true});
    REQUIRE(good(map.write_codes(down, Lane{0}, codes(0, 0), codes(12, 12))));
    CHECK(write_at(down, 0).mask == 0x0F);
    Batch none;
    CHECK(!map.write_codes(none, Lane{0}, codes(0, 0), std::nullopt));
}

TEST_CASE("without a strobe a change with no allowed way is refused") {
    BoardFile board = small_board();
    board.strobe = false;
    board.forbidden = {{{{"a", 5, 5}, {"b", 0, 0}}, ""}, {{{"a", 0, 0}, {"b", 5, 5}}, ""}};
    const RegisterMap map(board);
    Batch batch;
    const auto stuck = map.write_codes(batch, Lane{0}, codes(5, 5), codes(0, 0));
    REQUIRE(!stuck);
    CHECK(stuck.error().cause == Cause::not_allowed);
    CHECK(stuck.error().what ==
          "every order of writes from a=0,b=0 to a=5,b=5 passes a forbidden combination");
    CHECK(batch.empty());
}

TEST_CASE("a read-back that differs is a fault that names field, written and read") {
    const RegisterMap map(small_board());
    Batch batch;
    REQUIRE(good(map.write_codes(batch, Lane{1}, codes(9, 3), std::nullopt)));
    BatchReply reply;
    reply.results = {0x09, 0x20};
    const auto differs = map.check_reply(batch, reply);
    REQUIRE(!differs);
    CHECK(differs.error().cause == Cause::not_accepted);
    CHECK(differs.error().reg == "EQ.b");
    CHECK(differs.error().lane == Lane{1});
    CHECK(differs.error().what == "EQ.b was written as 0x30 and read back as 0x20 (mask 0xF0)");
    reply.results = {0x09, 0x30};
    CHECK(good(map.check_reply(batch, reply)));
    reply.results = {0x09};
    CHECK(map.check_reply(batch, reply).error().cause == Cause::refused);
}

TEST_CASE("a batch that the board ended is a fault that names the operation's register") {
    const RegisterMap map(small_board());
    Batch batch;
    REQUIRE(good(map.read(batch, Lane{0}, {"EQ", "a"})));
    REQUIRE(
        good(map.wait_until(batch, Lane{0}, {"STATUS", "lock"}, 1, std::chrono::microseconds(9))));
    BatchReply reply;
    reply.outcome = Outcome::wait_expired;
    reply.failed_at = 1;
    reply.results = {0x1, 0x0};
    const auto expired = map.check_reply(batch, reply);
    REQUIRE(!expired);
    CHECK(expired.error().cause == Cause::wait_expired);
    CHECK(expired.error().reg == "STATUS.lock");
    reply.outcome = Outcome::no_register;
    CHECK(map.check_reply(batch, reply).error().what ==
          "the board has no register STATUS.lock at 0x103");
    reply.failed_at = 2;
    CHECK(map.check_reply(batch, reply).error().cause == Cause::refused);
}
