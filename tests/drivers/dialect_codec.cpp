#include <algorithm>
#include <catch2/catch.hpp>
#include <random>

#include "drivers/dialects/bytes.hpp"
#include "drivers/dialects/cobs.hpp"
#include "drivers/dialects/crc32c.hpp"
#include "drivers/dialects/frames.hpp"
#include "scripted_board.hpp"

using namespace lanewright;
using lanewright::test::framed_by_hand;
using lanewright::test::Octets;
using lanewright::test::unframed_by_hand;

namespace {

using ByteList = std::vector<std::byte>;

ByteList bytes(std::initializer_list<unsigned> values) {
    ByteList out;
    for (const unsigned value : values) out.push_back(static_cast<std::byte>(value));
    return out;
}

ByteList bytes(const Octets& values) {
    ByteList out;
    for (const std::uint8_t value : values) out.push_back(static_cast<std::byte>(value));
    return out;
}

ByteList run(unsigned first, unsigned last) {
    ByteList out;
    for (unsigned value = first; value <= last; ++value) {
        out.push_back(static_cast<std::byte>(value));
    }
    return out;
}

ByteList joined(std::initializer_list<ByteList> parts) {
    ByteList out;
    for (const ByteList& part : parts) out.insert(out.end(), part.begin(), part.end());
    return out;
}

ByteList random_bytes(std::mt19937& random, std::size_t most) {
    ByteList out(random() % (most + 1));
    // Many zeros and long runs without one: both are what COBS has to deal with.
    const unsigned zero_in = 1 + random() % 400;
    for (std::byte& each : out) {
        each = random() % zero_in == 0 ? std::byte{0} : static_cast<std::byte>(1 + random() % 255);
    }
    return out;
}

}  // namespace

TEST_CASE("CRC-32C gives the values of RFC 3720 appendix B.4") {
    CHECK(crc32c(ByteList(32, std::byte{0x00})) == 0x8A9136AA);
    CHECK(crc32c(ByteList(32, std::byte{0xFF})) == 0x62A8AB43);
    CHECK(crc32c(run(0x00, 0x1F)) == 0x46DD794E);
    ByteList falling = run(0x00, 0x1F);
    std::reverse(falling.begin(), falling.end());
    CHECK(crc32c(falling) == 0x113FDB5C);
    CHECK(crc32c({}) == 0);
    // The usual check of catalogues of CRCs (common practice).
    CHECK(crc32c(bytes({'1', '2', '3', '4', '5', '6', '7', '8', '9'})) == 0xE3069283);
}

TEST_CASE("COBS encodes and decodes as Cheshire and Baker describe it") {
    // IEEE/ACM Transactions on Networking 7(2), 1999, and the vectors that follow from its rules.
    const std::vector<std::pair<ByteList, ByteList>> vectors{
        {{}, bytes({1})},
        {bytes({0}), bytes({1, 1})},
        {bytes({0, 0}), bytes({1, 1, 1})},
        {bytes({0, 0x11, 0}), bytes({1, 2, 0x11, 1})},
        {bytes({0x11, 0x22, 0, 0x33}), bytes({3, 0x11, 0x22, 2, 0x33})},
        {bytes({0x11, 0x22, 0x33, 0x44}), bytes({5, 0x11, 0x22, 0x33, 0x44})},
        {bytes({0x11, 0, 0, 0}), bytes({2, 0x11, 1, 1, 1})},
        // The paper's own example (value from memory).
        {bytes({0x45, 0, 0, 0x2C, 0x4C, 0x79, 0, 0, 0x40, 6, 0x4F, 0x37}),
         bytes({2, 0x45, 1, 4, 0x2C, 0x4C, 0x79, 1, 5, 0x40, 6, 0x4F, 0x37})},
        {run(1, 254), joined({bytes({255}), run(1, 254)})},
        {run(0, 254), joined({bytes({1, 255}), run(1, 254)})},
        {run(1, 255), joined({bytes({255}), run(1, 254), bytes({2, 255})})},
        {joined({run(2, 255), bytes({0})}), joined({bytes({255}), run(2, 255), bytes({1, 1})})},
        {joined({run(3, 255), bytes({0, 1})}), joined({bytes({254}), run(3, 255), bytes({2, 1})})},
    };
    for (const auto& [data, encoded] : vectors) {
        INFO(hex_of(data));
        CHECK(cobs_encode(data) == encoded);
        REQUIRE(cobs_decode(encoded));
        CHECK(*cobs_decode(encoded) == data);
    }
}

TEST_CASE("a last full COBS block may stand with or without an empty block behind it") {
    const ByteList data = run(1, 254);
    const ByteList with = joined({bytes({255}), data, bytes({1})});
    REQUIRE(cobs_decode(with));
    CHECK(*cobs_decode(with) == data);
}

TEST_CASE("COBS that is cut short or holds a zero does not decode") {
    CHECK(!cobs_decode({}));
    CHECK(!cobs_decode(bytes({0})));
    CHECK(!cobs_decode(bytes({3, 1})));
    CHECK(!cobs_decode(bytes({3, 1, 0})));
    CHECK(!cobs_decode(bytes({2, 1, 0, 1})));
}

TEST_CASE("20,000 random payloads survive framing, also by another hand's codec") {
    std::mt19937 random(20011);
    for (int i = 0; i < 20000; ++i) {
        const ByteList payload = random_bytes(random, i % 16 == 0 ? 700 : 60);
        const ByteList encoded = cobs_encode(payload);
        REQUIRE(std::find(encoded.begin(), encoded.end(), std::byte{0}) == encoded.end());
        REQUIRE(encoded.size() <=
                payload.size() + std::max<std::size_t>(1, (payload.size() + 253) / 254));
        REQUIRE(*cobs_decode(encoded) == payload);
        if (payload.empty()) continue;
        Octets octets;
        for (const std::byte each : payload) octets.push_back(static_cast<std::uint8_t>(each));
        const ByteList frame = frame_of(payload);
        Octets inner;
        for (std::size_t k = 0; k + 1 < frame.size(); ++k) {
            inner.push_back(static_cast<std::uint8_t>(frame[k]));
        }
        REQUIRE(unframed_by_hand(inner) == octets);
        FrameReader reader(1000);
        const auto payloads = reader.feed(bytes(framed_by_hand(octets)));
        REQUIRE(payloads.size() == 1);
        REQUIRE(payloads.front() == payload);
    }
}

TEST_CASE("a frame is found in whatever pieces it arrives and whatever stands around it") {
    const ByteList payload = bytes({0x82, 0, 1, 0, 0, 7});
    ByteList stream = bytes({0, 0, 0, 'b', 'o', 'o', 't', 0});
    const ByteList frame = frame_of(payload);
    stream.insert(stream.end(), frame.begin(), frame.end());
    stream.push_back(std::byte{0});
    FrameReader reader(64);
    std::size_t found = 0;
    for (const std::byte each : stream) {
        for (const ByteList& got : reader.feed(std::span(&each, 1))) {
            CHECK(got == payload);
            ++found;
        }
    }
    CHECK(found == 1);
    CHECK(reader.good() == 1);
    CHECK(reader.bad() == 1);  // the console's word
}

TEST_CASE("no single flipped bit of a frame passes as a frame") {
    const ByteList frame = frame_of(bytes({0x82, 3, 2, 1, 0x4A, 0x3B, 7, 0, 1, 9, 1}));
    for (std::size_t bit = 0; bit < frame.size() * 8; ++bit) {
        ByteList flipped = frame;
        flipped[bit / 8] ^= static_cast<std::byte>(1u << (bit % 8));
        flipped.push_back(std::byte{0});
        FrameReader reader(64);
        INFO("bit " << bit);
        CHECK(reader.feed(flipped).empty());
        CHECK(reader.bad() >= 1);
    }
}

TEST_CASE("a flood without a zero is dropped, counted once, and does not grow the memory") {
    FrameReader reader(64);
    for (int i = 0; i < 1000; ++i) CHECK(reader.feed(ByteList(1000, std::byte{0x55})).empty());
    const ByteList payload = bytes({0x82, 1, 2, 3});
    CHECK(reader.feed(bytes({0})).empty());
    CHECK(reader.bad() == 1);
    CHECK(reader.feed(frame_of(payload)).size() == 1);
    const ByteList largest(64, std::byte{7});
    CHECK(reader.feed(frame_of(largest)).size() == 1);
    CHECK(reader.feed(frame_of(ByteList(66, std::byte{7}))).empty());
}

TEST_CASE("varints and address distances come back as they went in") {
    for (const std::uint32_t value : {0u, 1u, 127u, 128u, 300u, 16383u, 16384u, 0x0FFFFFFFu,
                                      0x10000000u, 0x80000000u, 0xFFFFFFFFu}) {
        ByteList out;
        put_varint(out, value);
        ByteReader in(out);
        CHECK(in.varint() == value);
        CHECK(in.good());
        CHECK(in.at_end());
        for (const std::uint32_t from : {0u, 5u, 0x7FFFFFFFu, 0xFFFFFFFFu}) {
            CHECK(add_zigzag(from, zigzag_of_difference(from, value)) == value);
        }
    }
    ByteList three_hundred;
    put_varint(three_hundred, 300);
    CHECK(three_hundred == bytes({0xAC, 0x02}));
    CHECK(zigzag_of_difference(5, 4) == 1);
    CHECK(zigzag_of_difference(4, 5) == 2);
    CHECK(zigzag_of_difference(0, 0xFFFFFFFF) == 1);
}

TEST_CASE("varints that are too long, too large or cut off are malformed") {
    for (const ByteList& bad : {bytes({0x80}), bytes({0x80, 0x80, 0x80, 0x80, 0x80, 0x01}),
                                bytes({0xFF, 0xFF, 0xFF, 0xFF, 0x1F}), ByteList{}}) {
        ByteReader in(bad);
        CHECK(in.varint() == 0);
        CHECK(!in.good());
    }
    const ByteList long_zero = bytes({0x80, 0x00});
    ByteReader padded(long_zero);
    CHECK(padded.varint() == 0);
    CHECK(padded.good());
}
