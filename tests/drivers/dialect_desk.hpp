#pragma once
// Purpose:   the framed dialect on a desk: what it sends is taken apart by the other hand's codec,
//            what the board says is put together by hand.
// Ownership: owns its dialect.
// Threads:   the test's.

#include <chrono>
#include <cstdint>
#include <initializer_list>
#include <vector>

#include "drivers/dialects/framed.hpp"
#include "drivers/registers/register_map.hpp"
#include "scripted_board.hpp"
#include "small_board.hpp"

namespace lanewright::test {

constexpr std::uint32_t desk_session = 0x1D2C3B4A;
constexpr std::chrono::milliseconds desk_answer_time{100};

std::vector<std::byte> bytes_of(const Octets& octets);
Octets octets_of(const std::vector<std::byte>& bytes);

// The payloads of the frames among these bytes; a frame that does not decode throws.
std::vector<Octets> payloads_in(const std::vector<std::byte>& sent);

// Payloads of a board's messages.
Octets hello_answer(std::uint8_t try_number, std::uint32_t session, std::uint32_t boot,
                    bool resumed, std::uint32_t slots = 16);
Octets reply_to(const Octets& batch, const Octets& content);
Octets error_to(const Octets& batch, std::uint32_t boot, std::uint8_t error);

class Desk {
  public:
    Desk();

    // Boards' payloads in, as good frames; the step that follows.
    DialectStep hear(std::initializer_list<Octets> payloads);
    DialectStep tick(std::chrono::milliseconds time = {});  // time passes
    // Greeted by boot 7 and admitted; what was sent is dropped.
    void greet();
    void admit();
    DialectStep submit(std::uint64_t ticket, const Batch& batch,
                       Urgency urgency = Urgency::ordinary);

    Batch read_batch() const;    // repeatable: reads ID.value
    Batch strobe_batch() const;  // not repeatable

    framed::Framed dialect;
    RegisterMap map;
    TimePoint now{std::chrono::hours(1)};
    std::uint8_t last_try = 0;
};

}  // namespace lanewright::test
