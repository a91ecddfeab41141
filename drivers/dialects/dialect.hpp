#pragma once
// Purpose:   how a board is spoken to, as a pure state machine over bytes and given times: no
//            socket, no clock, no chance of its own. A Session drives it over any link.
// Ownership: a dialect owns copies of the batches under way.
// Threads:   one thread at a time.
//
// Life:      link_reopened() after the link was opened, then step(). The dialect greets the board
//            and says so in board_said. Until admit(), only batches submitted as Urgency::identity
//            go out: nobody knows yet whether it is the right board. admit() sends what waits, and
//            repeats what was under way when the link was lost.
// Promise:   a batch is carried out at most once unless it is repeatable. Each submitted ticket is
//            finished exactly once, by a reply or a fault, unless it is abandoned first.
// Faults:    board_reset: the board was reset with the batch submitted; nothing it did still
//            stands. outcome_unknown: sent, not repeatable, and the board no longer remembers it.
//            refused: the board, or the dialect's limits, would not have it; nothing was done.

#include <chrono>
#include <cstddef>
#include <cstdint>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "drivers/faults/fault.hpp"
#include "drivers/registers/batch.hpp"

namespace lanewright {

enum class Ticket : std::uint64_t {};

enum class Urgency : std::uint8_t { ordinary, identity };

struct DialectTraits {
    std::string name;
    std::size_t in_flight = 1;        // most batches under way at once
    bool board_waits = true;          // wait-until and pause are the board's own doing
    bool tells_reset = false;         // a reset shows in the next answer, whatever was asked
    std::size_t most_operations = 0;  // in one batch; 0: not known before the greeting
    std::chrono::microseconds longest_wait{};
};

struct Finished {
    Ticket ticket{};
    Result<BatchReply> result;
};

struct BoardSaid {
    bool greeted = false;  // the board answered the greeting; admit() is awaited
    bool reset = false;    // its boot number is another than before
    std::uint32_t boot = 0;
    std::uint32_t bad_frames = 0;  // as the board counts them, where it does
};

// What is to be done after an event.
struct DialectStep {
    std::vector<std::byte> send;
    std::vector<Ticket> started;  // first sent with these bytes
    std::vector<Finished> finished;
    std::optional<BoardSaid> board_said;
    std::optional<Fault> hopeless;        // this board cannot be spoken to; nothing more is sent
    std::optional<TimePoint> call_again;  // step() is to be called then, if not before
};

struct DialectCounts {
    std::uint64_t frames_sent = 0, frames_received = 0;
    std::uint64_t bad_frames = 0;  // received and dropped
};

class Dialect {
  public:
    virtual ~Dialect() = default;

    virtual const DialectTraits& traits() const = 0;  // may change with board_said
    virtual const DialectCounts& counts() const = 0;

    // Whether the batch is within the limits now known; `why` says which it breaks.
    virtual bool fits(const Batch& batch, std::string& why) const = 0;

    // Bytes of request and reply on the line at most, for deadlines on slow links.
    virtual std::size_t line_bytes(const Batch& batch) const = 0;

    // Takes the batch up; bytes come from the next step().
    virtual void submit(Ticket ticket, const Batch& batch, Urgency urgency) = 0;

    virtual DialectStep step(std::span<const std::byte> received, TimePoint now) = 0;

    // The identity was read and is right.
    virtual DialectStep admit(TimePoint now) = 0;

    // The ticket's answer did not come in time: ask again, carrying nothing out twice.
    virtual DialectStep again(Ticket ticket, TimePoint now) = 0;

    // Nobody waits for the ticket any longer. Whether it was carried out is then not known if
    // was_sent() says so.
    virtual DialectStep abandon(Ticket ticket, TimePoint now) = 0;
    virtual bool was_sent(Ticket ticket) const = 0;

    // What was sent for the ticket, for a message; empty when nothing was.
    virtual std::string sent_hex(Ticket ticket) const = 0;

    virtual void link_reopened() = 0;

    // Nothing is sent until link_reopened(); what is under way stays under way.
    virtual void link_lost() = 0;
};

struct DialectOptions {
    std::uint32_t session = 1;  // random, chosen by the caller
    std::chrono::nanoseconds answer_time = std::chrono::milliseconds(400);  // for one greeting
};

struct DialectEntry {
    std::string_view name;
    std::unique_ptr<Dialect> (*make)(const DialectOptions& options);
};

// One line a dialect.
std::span<const DialectEntry> dialects();

// The entry of that name, or null.
const DialectEntry* find_dialect(std::string_view name);

}  // namespace lanewright
