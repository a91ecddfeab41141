#pragma once
// Purpose:   the board behind its wires: hello, sessions, slots, batches (drivers/framed.md,
//            sections 3 to 6), carried out on the chip. All wires share it.
// Ownership: owns chip and sessions; ports belong to the servers, which say when one is gone.
// Threads:   io thread.

#include <cstdint>
#include <functional>
#include <list>
#include <memory>
#include <vector>

#include "drivers/io/task_group.hpp"
#include "drivers/io/time_source.hpp"
#include "sim_target/board/chip.hpp"
#include "sim_target/board/messages.hpp"

namespace lanewright::sim {

// One end of a wire, as the board sees it.
class Port {
  public:
    virtual ~Port() = default;
    virtual void send(Octets payload) = 0;  // never waits
};

class Board {
  public:
    // The boot number is drawn anew at each start, so that a board started again shows as reset.
    Board(TimeSource& time, const BoardSide& side, ChipOptions options,
          std::vector<std::unique_ptr<LaneModel>> models, std::uint32_t boot);
    ~Board();

    // A good frame's payload. `bad_frames`, of that wire, goes into a hello's answer. False where
    // it is none of a host's: the wire counts it as a bad frame.
    bool received(const std::shared_ptr<Port>& port, const Octets& payload,
                  std::uint32_t bad_frames);
    void port_gone(const Port& port);

    void reset();  // registers, sessions, batches under way; another boot number
    std::uint32_t boot() const { return boot_; }

    // Ends all batches; the board takes nothing more.
    Task<void> stop();

  private:
    struct Slot;
    struct Session;
    struct Running;

    void hello(const std::shared_ptr<Port>& port, const Hello& hello, std::uint32_t bad_frames);
    std::shared_ptr<Session> session_for(const Hello& hello, bool& resumed);
    void forget_oldest();
    bool batch(const std::shared_ptr<Port>& port, const Octets& payload);
    BatchError check(const BatchHead& head, const std::shared_ptr<Session>& session,
                     std::span<const std::uint8_t> operations, std::vector<WireStep>& steps) const;
    void start(std::shared_ptr<Session> session, const BatchHead& head,
               std::vector<WireStep> steps);
    std::shared_ptr<Session> session_of(const Port& port) const;

    Task<void> carry_out(std::shared_ptr<Running> running);
    boost::asio::awaitable<Outcome> carry_out_step(std::shared_ptr<Running> running, WireStep step);
    boost::asio::awaitable<Outcome> wait_until(std::shared_ptr<Running> running, WireStep step);
    Outcome read_step(const WireStep& step, Running& running);
    Outcome check_step(const WireStep& step, Running& running);
    void wake_waits();
    void strike_in_mid_batch(Running& running, std::size_t step);

    TimeSource& time_;
    BoardLimits limits_;
    std::vector<std::uint64_t> reset_at_;
    bool reset_before_;
    Chip chip_;
    std::uint32_t boot_;
    std::uint64_t batches_ = 0;  // new ones since the start
    std::uint64_t uses_ = 0;
    std::list<std::shared_ptr<Session>> sessions_;
    Signal changed_;  // raised and lowered at once: whoever waits looks again
    TaskGroup tasks_;
};

}  // namespace lanewright::sim
