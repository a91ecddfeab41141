#pragma once
// Purpose:   one wire of the board: bytes to frames and back, with the line's rate, the latency
//            and the faults that the target file asks for. Kinds of wires only move bytes.
// Ownership: kept alive by its own tasks; refers to the Hub, which outlives it.
// Threads:   io thread.

#include <functional>
#include <map>
#include <memory>
#include <span>
#include <vector>

#include "drivers/io/task_group.hpp"
#include "drivers/io/time_source.hpp"
#include "sim_target/board/board.hpp"
#include "sim_target/board/wire_faults.hpp"

namespace lanewright::sim {

// What all wires share.
struct Hub {
    Hub(TimeSource& source, Board& its_board, const BoardSide& side, double scale, const Stop& stop)
        : time(source),
          board(its_board),
          wire(side.wire),
          faults(side.faults),
          time_scale(scale),
          tasks(source.io(), stop) {}
    TimeSource& time;
    Board& board;
    WireOptions wire;
    WireFaults faults;
    double time_scale;
    TaskGroup tasks;
    std::uint64_t frames = 0;                // received by any wire since the start
    std::vector<std::function<void()>> cut;  // one a server: its wires are gone

    void drop_all_wires();
    std::chrono::nanoseconds time_down() const;
};

class WireEnd : public Port, public std::enable_shared_from_this<WireEnd> {
  public:
    // byte_s: seconds a byte takes on the line; 0: none.
    WireEnd(Hub& hub, double byte_s);

    void send(Octets payload) override;

    // Runs until the wire is gone or the hub stops.
    static Task<void> run(std::shared_ptr<WireEnd> self);

    // Ends run() soon.
    void close();

  protected:
    virtual boost::asio::awaitable<std::size_t> read_bytes(
        std::span<std::uint8_t> buffer) = 0;                             // 0: gone
    virtual boost::asio::awaitable<bool> write_bytes(Octets bytes) = 0;  // false: gone
    virtual void shut() = 0;  // ends a read or write that is going on
    Hub& hub() { return hub_; }
    Stop stopped() const { return stop_; }

  private:
    static Task<void> write_queued(std::shared_ptr<WireEnd> self);
    static Task<void> take_late(std::shared_ptr<WireEnd> self, FramePiece piece);
    void take(std::span<const std::uint8_t> received);
    void take_frame(Octets line_bytes);
    void arrive(std::span<const std::uint8_t> line_bytes);
    void queue(Octets bytes, std::chrono::nanoseconds delay);
    std::chrono::nanoseconds on_the_line(std::size_t bytes) const;

    Hub& hub_;
    double byte_s_;
    Stop stop_;
    Signal queued_;
    FrameSplitter sent_, arrived_;  // before and after the wire's faults
    std::uint32_t bad_frames_ = 0;
    std::multimap<TimePoint, Octets> outgoing_;
    std::size_t outgoing_size_ = 0;
    TimePoint line_free_{};
};

}  // namespace lanewright::sim
