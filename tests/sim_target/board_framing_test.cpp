#include <catch2/catch.hpp>
#include <random>
#include <string>

#include "sim_target/board/messages.hpp"

using namespace lanewright::sim;

namespace {

Octets octets(const std::string& hex) {
    Octets out;
    for (std::size_t at = 0; at + 1 < hex.size(); at += 3) {
        out.push_back(static_cast<std::uint8_t>(std::stoul(hex.substr(at, 2), nullptr, 16)));
    }
    return out;
}

Octets repeated(std::uint8_t value, std::size_t count) {
    return Octets(count, value);
}

Octets counting(unsigned from, unsigned to) {
    Octets out;
    for (unsigned value = from; value <= to; ++value)
        out.push_back(static_cast<std::uint8_t>(value));
    return out;
}

BatchError steps_of(const std::string& hex, std::vector<WireStep>& steps, BoardLimits limits = {}) {
    steps.clear();
    return decode_steps(octets(hex), limits, steps);
}

}  // namespace

TEST_CASE("The board's CRC-32C has the published check values") {
    // RFC 3720, appendix B.4.
    CHECK(checksum(repeated(0, 32)) == 0x8A9136AA);
    CHECK(checksum(repeated(0xFF, 32)) == 0x62A8AB43);
    CHECK(checksum(counting(0, 0x1F)) == 0x46DD794E);
    const std::string digits = "123456789";
    CHECK(checksum(Octets(digits.begin(), digits.end())) == 0xE3069283);
}

TEST_CASE("The board's COBS stuffs as the paper's method says") {
    // Cheshire and Baker, IEEE/ACM Trans. Networking 7(2), 1999; values computed by its method.
    CHECK(stuffed({}) == octets("01"));
    CHECK(stuffed(octets("00")) == octets("01 01"));
    CHECK(stuffed(octets("11 22 00 33")) == octets("03 11 22 02 33"));
    CHECK(stuffed(octets("11 00 00 00")) == octets("02 11 01 01 01"));
    Octets full = counting(1, 254);
    Octets expected = full;
    expected.insert(expected.begin(), 0xFF);
    CHECK(stuffed(full) == expected);
    expected.push_back(0x01);
    CHECK(unstuffed(expected) == full);  // both endings are allowed
    full.push_back(0xFF);
    expected.back() = 0x02;
    expected.push_back(0xFF);
    CHECK(stuffed(full) == expected);
    CHECK_FALSE(unstuffed(octets("05 11 22")));
    CHECK_FALSE(unstuffed(octets("03 11 00")));
}

TEST_CASE("Random payloads survive the line, and a flipped bit never does") {
    std::mt19937 random(11);
    for (int round = 0; round < 2000; ++round) {
        Octets payload(1 + random() % 700);
        for (auto& byte : payload)
            byte = static_cast<std::uint8_t>(random() % 3 == 0 ? 0 : random());
        Octets line = line_bytes_of(payload);
        REQUIRE(line.back() == 0);
        line.pop_back();
        REQUIRE(payload_of(line) == payload);
        line[random() % line.size()] ^= static_cast<std::uint8_t>(1u << (random() % 8));
        REQUIRE(payload_of(line) != payload);
    }
}

TEST_CASE("A splitter finds frames in any pieces, and drops what is too long") {
    FrameSplitter splitter(64);
    CHECK(splitter.take(octets("00 00 11 22")).empty());
    CHECK(splitter.take(octets("33 00 44 00 00")) == std::vector{octets("11 22 33"), octets("44")});
    CHECK(splitter.take(repeated(7, 5000)).empty());
    CHECK(splitter.take(octets("00 55 00")) == std::vector<Octets>{octets("55")});
    CHECK(splitter.too_long() == 1);
}

TEST_CASE("A hello and its answer are those of the protocol page's example") {
    // drivers/framed.md, section 7.
    const auto hello = decode_hello(octets("01 01 01 4A 3B 2C 1D"));
    REQUIRE(hello);
    CHECK(hello->session == 0x1D2C3B4A);
    HelloAnswer answer;
    answer.hello = *hello;
    answer.boot = 7;
    CHECK(line_bytes_of(encode(answer)) ==
          octets("09 81 01 01 4A 3B 2C 1D 07 0B 80 08 10 80 02 80 8E CE 1C 04 05 DA 4F 90 F8 00"));
    CHECK_FALSE(decode_hello(octets("01 01 01 4A 3B 2C")));
    CHECK_FALSE(decode_hello(octets("01 01 01 00 00 00 00")));
}

TEST_CASE("A batch and its reply are those of the protocol page's example") {
    // drivers/framed.md, section 7.
    const Octets payload = octets(
        "02 03 02 01 4A 3B AC 02 32 8A 04 01 01 32 09 1F 09 31 08 01 01 04 C8 01 33 04 01 01 88 "
        "27");
    std::span<const std::uint8_t> operations;
    const auto head = decode_head(payload, operations);
    REQUIRE(head);
    CHECK(head->slot == 3);
    CHECK(head->count == 258);
    CHECK(head->boot == 300);
    std::vector<WireStep> steps;
    REQUIRE(decode_steps(operations, {}, steps) == BatchError::none);
    REQUIRE(steps.size() == 5);
    CHECK(steps[0].address == 0x105);
    CHECK(steps[1].address == 0x100);
    CHECK(steps[1].mask == 0x1Fu);
    CHECK(steps[2].verb == Verb::write);
    CHECK(steps[3].time_us == 200);
    CHECK(steps[4].address == 0x106);
    CHECK(steps[4].time_us == 5000);
    CHECK(line_bytes_of(encode_reply(*head, 300, Outcome::wait_expired, 4, octets("01 09 00"))) ==
          octets("0D 82 03 02 01 4A 3B AC 02 04 04 01 09 05 AF 0C 41 AA 00"));
    CHECK(line_bytes_of(encode_error(*head, 301, BatchError::other_boot)) ==
          octets("0E 83 03 02 01 4A 3B AD 02 01 94 12 E0 74 00"));
}

TEST_CASE("Malformed batches and batches beyond a limit are told apart") {
    std::vector<WireStep> steps;
    CHECK(steps_of("10 08", steps) == BatchError::none);
    CHECK(steps_of("05", steps) == BatchError::malformed);        // no such operation
    CHECK(steps_of("40", steps) == BatchError::malformed);        // high bits
    CHECK(steps_of("18", steps) == BatchError::malformed);        // no such addressing
    CHECK(steps_of("20 01", steps) == BatchError::malformed);     // a read with a mask
    CHECK(steps_of("21 00 00", steps) == BatchError::malformed);  // an empty mask
    CHECK(steps_of("21 01 02", steps) == BatchError::malformed);  // value outside the mask
    CHECK(steps_of("0C 01", steps) == BatchError::malformed);     // a pause with an address
    CHECK(steps_of("01", steps) == BatchError::malformed);        // ends too soon
    CHECK(steps_of("01 FF FF FF FF 1F", steps) == BatchError::malformed);  // beyond 32 bits
    CHECK(steps_of("04 64", steps, {.longest_wait_us = 100}) == BatchError::none);
    CHECK(steps_of("04 65", steps, {.longest_wait_us = 100}) == BatchError::beyond_limit);
    BoardLimits small;
    small.largest_payload = 64;
    CHECK(steps_of("08 08 08 08 08 08 08 08", steps, small) == BatchError::none);
    CHECK(steps_of("08 08 08 08 08 08 08 08 08", steps, small) == BatchError::beyond_limit);
    CHECK(steps_of("10 01 08", steps) == BatchError::none);
    CHECK(steps[0].address == 0xFFFFFFFF);
    CHECK(steps[1].address == 0);
}
