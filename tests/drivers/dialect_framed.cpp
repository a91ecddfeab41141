#include <catch2/catch.hpp>

#include "dialect_desk.hpp"
#include "results.hpp"

using namespace lanewright;
using namespace lanewright::test;
using std::chrono::milliseconds;

namespace {

Ticket ticket(std::uint64_t number) {
    return static_cast<Ticket>(number);
}

std::uint32_t session_in(const Octets& hello) {
    return hello.at(3) + 256u * hello.at(4) + 65536u * hello.at(5) + 16777216u * hello.at(6);
}

}  // namespace

TEST_CASE("the registry finds the framed dialect by name and nothing else") {
    REQUIRE(find_dialect("framed") != nullptr);
    CHECK(find_dialect("framed")->make({})->traits().name == "framed");
    CHECK(find_dialect("frame") == nullptr);
    CHECK(dialects().size() >= 1);
}

TEST_CASE("the board is greeted at once, again when it is silent, and any try may be answered") {
    Desk desk;
    CHECK(desk.tick().send.empty());  // no link yet
    desk.dialect.link_reopened();
    const DialectStep first = desk.tick();
    CHECK(payloads_in(first.send) == std::vector<Octets>{{1, 1, 1, 0x4A, 0x3B, 0x2C, 0x1D}});
    CHECK(first.send.front() == std::byte{0});
    REQUIRE(first.call_again);
    CHECK(*first.call_again == desk.now + desk_answer_time);
    CHECK(desk.tick(milliseconds(99)).send.empty());
    CHECK(payloads_in(desk.tick(milliseconds(1)).send).at(0).at(1) == 2);
    const DialectStep answered = desk.hear({hello_answer(1, desk_session, 7, false)});
    REQUIRE(answered.board_said);
    CHECK(answered.board_said->greeted);
    CHECK(!answered.board_said->reset);
    CHECK(answered.board_said->boot == 7);
    CHECK(desk.dialect.traits().in_flight == 16);
    CHECK(desk.dialect.traits().most_operations == 256);
    CHECK(desk.dialect.traits().longest_wait == std::chrono::seconds(60));
}

TEST_CASE("answers to another session, to a try never made, or with absurd limits do not greet") {
    Desk desk;
    desk.dialect.link_reopened();
    desk.tick();
    CHECK(!desk.hear({hello_answer(1, desk_session + 1, 7, false)}).board_said);
    CHECK(!desk.hear({hello_answer(2, desk_session, 7, false)}).board_said);
    CHECK(!desk.hear({hello_answer(1, desk_session, 0, false)}).board_said);
    CHECK(!desk.hear({hello_answer(1, desk_session, 7, false, 0)}).board_said);
    CHECK(desk.dialect.counts().bad_frames == 2);
    CHECK(desk.hear({hello_answer(1, desk_session, 7, false)}).board_said);
}

TEST_CASE("a board of another version is hopeless and nothing more is sent") {
    Desk desk;
    desk.dialect.link_reopened();
    desk.tick();
    Octets answer = hello_answer(1, desk_session, 7, false);
    answer[2] = 2;
    const DialectStep step = desk.hear({answer});
    REQUIRE(step.hopeless);
    CHECK(step.hopeless->cause == Cause::refused);
    CHECK(desk.tick(milliseconds(1000)).send.empty());
}

TEST_CASE("before the board is admitted only the identity goes out") {
    Desk desk;
    desk.greet();
    CHECK(desk.submit(1, desk.read_batch()).send.empty());
    const auto identity = payloads_in(desk.submit(2, desk.read_batch(), Urgency::identity).send);
    REQUIRE(identity.size() == 1);
    CHECK(identity[0] == Octets{2, 0, 1, 0, 0x4A, 0x3B, 7, 0x00});
    const DialectStep done = desk.hear({reply_to(identity[0], {0, 0x34})});
    REQUIRE(done.finished.size() == 1);
    CHECK(done.finished[0].ticket == ticket(2));
    const DialectStep admitted = desk.dialect.admit(desk.now);
    CHECK(payloads_in(admitted.send).size() == 1);
    CHECK(admitted.started == std::vector<Ticket>{ticket(1)});
}

TEST_CASE("replies may come in any order and go to the batch they belong to") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.read_batch()).send).at(0);
    const auto second = payloads_in(desk.submit(2, desk.read_batch()).send).at(0);
    CHECK(first[1] != second[1]);  // slots of their own
    const DialectStep step = desk.hear({reply_to(second, {0, 0x22}), reply_to(first, {0, 0x11})});
    REQUIRE(step.finished.size() == 2);
    CHECK(step.finished[0].ticket == ticket(2));
    CHECK(step.finished[0].result.value().results.at(0) == 0x22u);
    CHECK(step.finished[1].ticket == ticket(1));
    CHECK(step.finished[1].result.value().results.at(0) == 0x11u);
}

TEST_CASE("a doubled reply, a late one, and one of another session are given to nobody") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.read_batch()).send).at(0);
    CHECK(desk.hear({reply_to(first, {0, 1}), reply_to(first, {0, 1})}).finished.size() == 1);
    const auto second = payloads_in(desk.submit(2, desk.read_batch()).send).at(0);
    CHECK(second[1] == first[1]);  // the same slot, the next count
    CHECK(second[2] == first[2] + 1);
    CHECK(desk.hear({reply_to(first, {0, 0x66})}).finished.empty());
    Octets stranger = reply_to(second, {0, 0x66});
    stranger[4] ^= 1;
    CHECK(desk.hear({stranger}).finished.empty());
    Octets other_boot = reply_to(second, {0, 0x66});
    other_boot[6] = 6;
    CHECK(desk.hear({other_boot}).finished.empty());
    CHECK(desk.hear({reply_to(second, {0, 2})}).finished.size() == 1);
}

TEST_CASE("asking again sends the same bytes again, behind a zero") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.strobe_batch()).send).at(0);
    const DialectStep again = desk.dialect.again(ticket(1), desk.now);
    CHECK(again.send.front() == std::byte{0});
    CHECK(payloads_in(again.send).at(0) == first);
    CHECK(again.started.empty());
    CHECK(desk.hear({reply_to(first, {0})}).finished.size() == 1);
    CHECK(desk.dialect.again(ticket(1), desk.now).send.empty());
}

TEST_CASE("no more batches are under way than the board has slots and the rest follow in order") {
    Desk desk;
    desk.dialect.link_reopened();
    desk.tick();
    desk.hear({hello_answer(1, desk_session, 7, false, 2)});
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.read_batch()).send).at(0);
    CHECK(desk.submit(2, desk.read_batch()).started == std::vector<Ticket>{ticket(2)});
    CHECK(desk.submit(3, desk.read_batch()).send.empty());
    CHECK(desk.submit(4, desk.read_batch()).send.empty());
    CHECK(!desk.dialect.was_sent(ticket(3)));
    const DialectStep step = desk.hear({reply_to(first, {0, 1})});
    CHECK(step.started == std::vector<Ticket>{ticket(3)});
}

TEST_CASE("a batch refused for its boot number shows the reset to everything submitted") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.read_batch()).send).at(0);
    desk.submit(2, desk.strobe_batch());
    const DialectStep step = desk.hear({error_to(first, 8, 1)});
    REQUIRE(step.board_said);
    CHECK(step.board_said->reset);
    CHECK(!step.board_said->greeted);
    REQUIRE(step.finished.size() == 2);
    for (const Finished& finished : step.finished) {
        CHECK(finished.result.error().cause == Cause::board_reset);
    }
    const auto hello = payloads_in(step.send).at(0);
    CHECK(hello[0] == 1);
    CHECK((session_in(hello) & 0xFFFF) != (desk_session & 0xFFFF));
    // A reply of the time before, arriving now, is nobody's.
    CHECK(desk.hear({reply_to(first, {0, 1})}).finished.empty());
    const DialectStep greeted = desk.hear({hello_answer(hello[1], session_in(hello), 8, false)});
    REQUIRE(greeted.board_said);
    CHECK(greeted.board_said->greeted);
    CHECK(!greeted.board_said->reset);
}

TEST_CASE("a reset that only the next greeting shows is a reset as well") {
    Desk desk;
    desk.greet();
    desk.admit();
    desk.submit(1, desk.strobe_batch());
    desk.dialect.link_lost();
    desk.dialect.link_reopened();
    const auto hello = payloads_in(desk.tick().send).at(0);
    const DialectStep step = desk.hear({hello_answer(hello[1], desk_session, 9, false)});
    REQUIRE(step.board_said);
    CHECK(step.board_said->reset);
    REQUIRE(step.finished.size() == 1);
    CHECK(step.finished[0].result.error().cause == Cause::board_reset);
}

TEST_CASE("after a lost link a resumed session repeats what was under way byte for byte") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.strobe_batch()).send).at(0);
    desk.dialect.link_lost();
    CHECK(desk.dialect.again(ticket(1), desk.now).send.empty());
    CHECK(desk.submit(2, desk.read_batch()).send.empty());
    desk.dialect.link_reopened();
    const auto hello = payloads_in(desk.tick().send).at(0);
    CHECK(session_in(hello) == desk_session);
    CHECK(desk.hear({hello_answer(hello[1], desk_session, 7, true)}).send.empty());
    const auto sent = payloads_in(desk.dialect.admit(desk.now).send);
    REQUIRE(sent.size() == 2);
    CHECK(sent[0] == first);
}

TEST_CASE("a forgotten session leaves unrepeatable batches unknown and begins the others anew") {
    Desk desk;
    desk.greet();
    desk.admit();
    desk.submit(1, desk.strobe_batch());
    desk.submit(2, desk.read_batch());
    desk.dialect.link_lost();
    desk.dialect.link_reopened();
    auto hello = payloads_in(desk.tick().send).at(0);
    const DialectStep gone = desk.hear({hello_answer(hello[1], desk_session, 7, false)});
    REQUIRE(gone.finished.size() == 1);
    CHECK(gone.finished[0].ticket == ticket(1));
    CHECK(gone.finished[0].result.error().cause == Cause::outcome_unknown);
    CHECK(!gone.board_said);
    hello = payloads_in(gone.send).at(0);
    const std::uint32_t session = session_in(hello);
    CHECK(session != desk_session);
    CHECK(desk.hear({hello_answer(hello[1], session, 7, false)}).board_said);
    const auto sent = payloads_in(desk.dialect.admit(desk.now).send);
    REQUIRE(sent.size() == 1);
    CHECK(sent[0] == Octets{2, 0, 1, 0, static_cast<std::uint8_t>(session & 255),
                            static_cast<std::uint8_t>(session >> 8 & 255), 7, 0x00});
}

TEST_CASE("a batch given up is followed by an empty one before any other begins") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.strobe_batch()).send).at(0);
    CHECK(desk.dialect.was_sent(ticket(1)));
    const auto clearing = payloads_in(desk.dialect.abandon(ticket(1), desk.now).send);
    REQUIRE(clearing.size() == 1);
    CHECK(clearing[0] == Octets{2, first[1], 2, 0, 0x4A, 0x3B, 7});
    CHECK(desk.submit(2, desk.read_batch()).send.empty());
    // Late, and nobody waits for it any longer.
    CHECK(desk.hear({reply_to(first, {0})}).finished.empty());
    const DialectStep again = desk.tick(desk_answer_time);
    CHECK(payloads_in(again.send) == clearing);
    const DialectStep cleared = desk.hear({reply_to(clearing[0], {0})});
    CHECK(cleared.started == std::vector<Ticket>{ticket(2)});
    CHECK(!cleared.call_again);
}

TEST_CASE("a batch given up that still runs on the board holds up no other") {
    Desk desk;
    desk.greet();
    desk.admit();
    desk.submit(1, desk.strobe_batch());
    const auto clearing = payloads_in(desk.dialect.abandon(ticket(1), desk.now).send).at(0);
    CHECK(desk.submit(2, desk.read_batch()).send.empty());
    const DialectStep step = desk.hear({error_to(clearing, 7, 5)});
    CHECK(step.started == std::vector<Ticket>{ticket(2)});
    CHECK(payloads_in(step.send).at(0).at(1) != clearing[1]);
    REQUIRE(step.call_again);
    CHECK(payloads_in(desk.tick(desk_answer_time).send) == std::vector<Octets>{clearing});
}

TEST_CASE("a refused batch is finished as refused and its slot goes on with the next count") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.read_batch()).send).at(0);
    const DialectStep refused = desk.hear({error_to(first, 7, 4)});
    REQUIRE(refused.finished.size() == 1);
    CHECK(refused.finished[0].result.error().cause == Cause::refused);
    CHECK(!refused.finished[0].result.error().sent_hex.empty());
    const auto second = payloads_in(desk.submit(2, desk.read_batch()).send).at(0);
    // A second copy of the refusal does not meet the next batch.
    CHECK(desk.hear({error_to(first, 7, 4)}).finished.empty());
    CHECK(desk.hear({reply_to(second, {0, 1})}).finished.size() == 1);
}

TEST_CASE("a slot that the board calls behind or busy leads to a new session, nothing is lost") {
    for (const std::uint8_t error : {5, 6}) {
        Desk desk;
        desk.greet();
        desk.admit();
        const auto first = payloads_in(desk.submit(1, desk.strobe_batch()).send).at(0);
        const DialectStep step = desk.hear({error_to(first, 7, error)});
        CHECK(step.finished.empty());
        const auto hello = payloads_in(step.send).at(0);
        CHECK(session_in(hello) != desk_session);
        desk.hear({hello_answer(hello[1], session_in(hello), 7, false)});
        CHECK(payloads_in(desk.dialect.admit(desk.now).send).size() == 1);
    }
}

TEST_CASE("a board that knows no session is greeted anew and asked again") {
    Desk desk;
    desk.greet();
    desk.admit();
    const auto first = payloads_in(desk.submit(1, desk.read_batch()).send).at(0);
    const DialectStep step = desk.hear({error_to(first, 7, 2)});
    const auto hello = payloads_in(step.send).at(0);
    CHECK(session_in(hello) == desk_session);
    CHECK(step.finished.empty());
}

TEST_CASE("a reply that does not fit its batch is refused, not taken for a value") {
    const std::vector<Octets> bad{
        {0},        // the result is missing
        {0, 1, 2},  // one too many
        {7},        // no such outcome
        {4, 0, 1},  // a read cannot expire
        {1, 5},     // no such operation
        {0, 0x80},  // a varint cut off
        {5, 0, 1},  // a read is not written
    };
    for (const Octets& content : bad) {
        Desk desk;
        desk.greet();
        desk.admit();
        const auto batch = payloads_in(desk.submit(1, desk.read_batch()).send).at(0);
        const DialectStep step = desk.hear({reply_to(batch, content)});
        REQUIRE(step.finished.size() == 1);
        REQUIRE(!step.finished[0].result);
        CHECK(step.finished[0].result.error().cause == Cause::refused);
    }
}

TEST_CASE("a value wider than its register is refused") {
    Desk desk;
    desk.greet();
    desk.admit();
    Batch batch;
    REQUIRE(good(desk.map.read(batch, Lane{0}, {"EQ", "a"})));
    const auto sent = payloads_in(desk.submit(1, batch).send).at(0);
    // 65536 of a 16-bit register.
    const Octets wide = reply_to(sent, {0, 0x80, 0x80, 0x04});
    CHECK(desk.hear({wide}).finished.at(0).result.error().cause == Cause::refused);
}

TEST_CASE("a failed operation comes with what was done before it and what was seen") {
    Desk desk;
    desk.greet();
    desk.admit();
    Batch batch;
    REQUIRE(good(desk.map.read(batch, Lane{0}, {"ID", "value"})));
    REQUIRE(good(desk.map.write_declared(batch, Lane{0}, {"LOAD", "strobe"}, 1)));
    REQUIRE(good(
        desk.map.wait_until(batch, Lane{0}, {"STATUS", "lock"}, 1, std::chrono::microseconds(50))));
    REQUIRE(good(desk.map.read(batch, Lane{0}, {"NOTE", "value"})));
    const auto sent = payloads_in(desk.submit(1, batch).send).at(0);
    const BatchReply reply =
        desk.hear({reply_to(sent, {4, 2, 0x34, 0})}).finished.at(0).result.value();
    CHECK(reply.outcome == Outcome::wait_expired);
    CHECK(reply.failed_at == 2);
    using Results = std::vector<std::optional<std::uint32_t>>;
    CHECK(reply.results == Results{0x34u, std::nullopt, 0u, std::nullopt});
}

TEST_CASE("batches beyond the board's limits are known before they are sent") {
    Desk desk;
    Batch batch;
    for (int i = 0; i < 256; ++i) REQUIRE(good(desk.map.read(batch, Lane{0}, {"ID", "value"})));
    std::string why;
    CHECK(desk.dialect.fits(batch, why));  // nothing is known yet
    desk.greet();
    CHECK(!desk.dialect.fits(batch, why));
    CHECK(why == "bytes in a reply: 1300, the board takes 1024");
    const Batch part = RegisterMap::part_of(batch, 0, 200);
    CHECK(desk.dialect.fits(part, why));
    REQUIRE(good(desk.map.read(batch, Lane{0}, {"ID", "value"})));
    CHECK(!desk.dialect.fits(batch, why));
    CHECK(why == "operations in a batch: 257, the board takes 256");
    Batch wait;
    REQUIRE(good(desk.map.pause(wait, std::chrono::seconds(61))));
    CHECK(!desk.dialect.fits(wait, why));
}
