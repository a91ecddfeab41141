#pragma once
// Purpose:   keeps in touch with one board: drives any dialect over any link, with deadlines,
//            retry, resynchronisation and reconnection.
// Ownership: owns link and dialect; refers to the TimeSource, which must outlive it. close() must
//            have finished before it is destroyed, and every run() too.
// Threads:   io thread.
//
// After each (re)connection the board is greeted and its identity read; nothing else goes out
// before that was right. One coroutine reads the link, whatever happens; deadlines act on
// requests, never on the read. A request that is asked again is the same request to the board, so
// nothing is carried out twice. A batch that is not repeatable and whose outcome is not known is
// never sent again: outcome_unknown.

#include <chrono>
#include <cstdint>
#include <functional>
#include <map>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "drivers/board/registers.hpp"
#include "drivers/board/round_trips.hpp"
#include "drivers/dialects/dialect.hpp"
#include "drivers/io/link.hpp"
#include "drivers/io/signal.hpp"
#include "drivers/io/task_group.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright {

struct SessionOptions {
    std::string board;                                                      // for messages
    std::chrono::nanoseconds answer_time = std::chrono::milliseconds(400);  // for one attempt
    int attempts = 5;                                                       // in all
    std::chrono::nanoseconds patience = std::chrono::seconds(20);  // with a lost link or silence
    std::chrono::nanoseconds open_time = std::chrono::seconds(5);  // for opening the link once
};

struct SessionStatistics {
    std::uint64_t frames = 0;            // sent and received
    std::uint64_t bad_frames = 0;        // received and dropped
    std::uint64_t retries = 0;           // attempts after the first
    std::uint64_t reconnects = 0;        // links opened after the first
    std::uint64_t resets = 0;            // of the board, noticed by its boot number
    std::uint32_t board_bad_frames = 0;  // as the board counted them, at the last greeting
};

// What tells the right board from another one.
struct IdentityProbe {
    Batch batch;                                           // empty: any board will do
    std::function<Result<void>(const BatchReply&)> check;  // Cause::wrong_board with both values
};

class Session final : public Registers {
  public:
    Session(TimeSource& time, std::unique_ptr<Link> link, std::unique_ptr<Dialect> dialect,
            SessionOptions options, IdentityProbe probe);
    ~Session() override;

    // First contact: link opened, board greeted, identity right. Fails at once where a later loss
    // would be waited out: unreachable, busy, no_permission, timeout (silent), wrong_board.
    Task<void> open();

    // Ends everything: whatever waits fails with Cause::stopped. May be called again.
    Task<void> close();

    Task<BatchReply> run(Lane lane, Batch batch, TimePoint deadline) override;
    bool fits(const Batch& batch, std::string& why) const override;
    std::uint64_t resets() const override { return resets_; }
    std::chrono::nanoseconds longest(const Batch& batch) const override;

    SessionStatistics statistics() const;
    const RoundTrips& round_trips() const { return round_trips_; }
    const DialectTraits& dialect_traits() const { return dialect_->traits(); }
    const LinkTraits& link_traits() const { return link_->traits(); }

  private:
    // down: no link. greeting: the board has not answered yet, or not shown its identity.
    enum class State : std::uint8_t { down, greeting, ready, closed };
    struct Request;
    using RequestPtr = std::shared_ptr<Request>;

    // The tasks that run as long as the session.
    Task<void> keep_connected();
    Task<void> read_link();
    Task<void> write_link();
    Task<void> keep_time();

    Task<void> connect();
    Task<void> open_link();
    Task<void> qualify();
    Task<void> wait_for_greeting(TimePoint deadline);
    Task<void> recover();
    Task<void> let_go_of_link();
    void become(State state);
    void drop_link();

    Task<void> wait_until_ready(TimePoint deadline);
    Task<BatchReply> attend(RequestPtr request, TimePoint deadline);
    RequestPtr submit(Lane lane, Batch batch, Urgency urgency);
    bool ask_again(Request& request);
    Result<BatchReply> give_up(Request& request, Fault fault);
    Fault with_circumstances(const Request& request, Fault fault) const;
    Fault told_of_reset(Lane lane);
    void carry_out(DialectStep step);
    void finish(Finished finished);
    void arm(Request& request);
    void arm_all();
    void disarm_all();
    bool patience_is_over() const;
    TimePoint end_of_patience() const;
    std::chrono::nanoseconds allowance(const Batch& batch) const;
    std::chrono::nanoseconds greeting_time() const;
    Fault fault_of(Cause cause, std::string what) const;

    TimeSource& time_;
    std::unique_ptr<Link> link_;
    std::unique_ptr<Dialect> dialect_;
    SessionOptions options_;
    IdentityProbe probe_;

    TaskGroup tasks_;
    Stop stop_;
    Signal event_;      // raised for keep_connected, its only reader
    Signal readiness_;  // pulsed when the state, or the hope of it, has changed
    Signal link_up_;    // raised while the link is open
    Signal outgoing_;   // raised while bytes wait to be written
    Signal timer_;      // raised when call_again_ has changed

    State state_ = State::down;
    bool started_ = false;  // open() has succeeded
    bool greeted_ = false;  // the dialect said so, and nobody has looked yet
    bool reading_ = false, writing_ = false;
    bool dropped_ = false;  // the read that ends now was ended by us
    std::optional<Fault> hopeless_;
    Fault last_trouble_;  // why the board is not ready
    TimePoint not_ready_since_{};
    std::optional<TimePoint> call_again_;
    TimePoint last_heard_{};  // when a good frame came last
    Bytes to_send_;
    std::vector<std::byte> received_;

    std::uint64_t next_ticket_ = 1;
    std::map<std::uint64_t, RequestPtr> requests_;  // under way, by ticket
    std::uint64_t retries_ = 0, opened_ = 0, resets_ = 0;
    std::uint64_t sent_before_greeting_ = 0;  // frames
    std::uint32_t board_bad_frames_ = 0;
    std::map<Lane, std::uint64_t> resets_told_;  // a lane hears of each reset once
    RoundTrips round_trips_;
};

}  // namespace lanewright
