#pragma once
// Purpose:   the host's side of the framed dialect (drivers/framed.md) as a state machine.
// Ownership: owns copies of the batches under way.
// Threads:   one thread at a time.

#include <cstdint>
#include <list>
#include <map>
#include <optional>
#include <set>
#include <string>
#include <vector>

#include "drivers/dialects/dialect.hpp"
#include "drivers/dialects/framed_messages.hpp"
#include "drivers/dialects/frames.hpp"

namespace lanewright::framed {

class Framed final : public Dialect {
  public:
    explicit Framed(const DialectOptions& options);

    const DialectTraits& traits() const override { return traits_; }
    const DialectCounts& counts() const override { return counts_; }
    bool fits(const Batch& batch, std::string& why) const override;
    std::size_t line_bytes(const Batch& batch) const override;
    void submit(Ticket ticket, const Batch& batch, Urgency urgency) override;
    DialectStep step(std::span<const std::byte> received, TimePoint now) override;
    DialectStep admit(TimePoint now) override;
    DialectStep again(Ticket ticket, TimePoint now) override;
    DialectStep abandon(Ticket ticket, TimePoint now) override;
    bool was_sent(Ticket ticket) const override;
    std::string sent_hex(Ticket ticket) const override;
    void link_reopened() override;
    void link_lost() override;

  private:
    // closed: no link yet. greeting: hello sent or due. greeted: identity only. open: admitted.
    enum class State : std::uint8_t { closed, greeting, greeted, open };

    struct Request {
        Ticket ticket{};
        Batch batch;
        Urgency urgency = Urgency::ordinary;
        std::optional<std::size_t> slot;  // under way in that slot; empty: not sent
        bool begun_before = false;        // reported as started already
        std::vector<std::byte> payload;   // as sent; sent again byte for byte
    };

    // A slot whose batch was given up is cleared by a batch without operations, so that a stray
    // copy of the one given up can no longer begin.
    struct Slot {
        enum class Use : std::uint8_t { free, busy, clearing };
        Use use = Use::free;
        bool still_running = false;  // the board says that the batch given up is being carried out
        std::uint16_t count = 0;
        Ticket ticket{};
        TimePoint next_try{};
    };

    void begin_greeting(bool new_session);
    void send_hello(DialectStep& step, TimePoint now);
    void send_waiting(DialectStep& step, TimePoint now);
    void start(Request& request, std::size_t slot, DialectStep& step, TimePoint now);
    void send_clearing(DialectStep& step, TimePoint now);
    void send_payload(const std::vector<std::byte>& payload, bool after_silence, DialectStep& step,
                      TimePoint now);
    std::optional<std::size_t> free_slot() const;
    bool clearing_holds_up() const;
    Head head_for(std::size_t slot) const;

    void take(const BoardMessage& message, DialectStep& step);
    void take_answer(const HelloAnswer& answer, DialectStep& step);
    void take_reply(const Reply& reply, DialectStep& step);
    void take_error(const ErrorReply& reply, DialectStep& step);
    void take_limits(const HelloAnswer& answer);
    Slot* slot_of(const Head& head);
    void refuse(Slot& slot, Error error, DialectStep& step);
    void finish(Ticket ticket, Result<BatchReply> result, DialectStep& step);
    void board_was_reset(std::uint32_t boot, DialectStep& step);
    void session_is_gone(DialectStep& step);
    void finish_step(DialectStep& step, TimePoint now);
    std::list<Request>::iterator find(Ticket ticket);
    std::list<Request>::const_iterator find(Ticket ticket) const;

    DialectTraits traits_;
    DialectCounts counts_;
    std::chrono::nanoseconds answer_time_;
    State state_ = State::closed;
    std::uint32_t session_ = 1;
    bool session_used_ = false;  // a batch has been sent in it
    std::uint32_t boot_ = 0;     // 0: no board has answered yet
    std::uint8_t last_try_ = 0;
    unsigned tries_ = 0;  // hellos of this greeting; answers to any of them count
    TimePoint next_hello_{};
    std::size_t largest_payload_ = 0;
    std::vector<Slot> slots_;
    std::list<Request> requests_;  // in order of submission
    FrameReader reader_;
    std::optional<TimePoint> last_sent_;
};

}  // namespace lanewright::framed
