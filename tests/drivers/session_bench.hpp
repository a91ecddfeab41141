#pragma once
// Purpose:   a board of the small kind, a cable in memory, virtual time, and one test task.
// Ownership: owns everything; run() closes the board before it returns.
// Threads:   the test's.

#include <catch2/catch.hpp>
#include <functional>
#include <memory>

#include "drivers/board/board.hpp"
#include "drivers/io/memory_link.hpp"
#include "results.hpp"
#include "scripted_board.hpp"
#include "small_board.hpp"

namespace lanewright::test {

class SessionBench {
  public:
    explicit SessionBench(MemoryOptions options = slow_memory());

    // Opens the board, runs the test's task, closes everything. Gives the task's result, or the
    // fault of opening.
    using TestTask = Task<void> (*)(SessionBench* bench);
    Result<void> run(TestTask task);

    static MemoryOptions slow_memory();  // 1 ms each way, so that answers can be overtaken

    Registers& registers() { return board->registers(); }
    LaneReader& lanes() { return board->lanes(); }
    SessionStatistics statistics() const { return board->statistics(); }
    TimePoint soon() const { return time.now() + std::chrono::seconds(30); }

    Batch reads(const FieldName& name, Lane lane = Lane{0}) const;
    Batch writes_note(std::uint32_t value) const;
    Batch strobes() const;

    boost::asio::io_context io;
    VirtualTimeSource time{io};
    MemoryPair pair;
    ScriptedBoard scripted;
    BoardFile file = small_board();
    RegisterMap map{file};
    std::unique_ptr<Board> board;  // open while the test's task runs
    SessionStatistics last_statistics;

  private:
    Task<void> whole(TestTask task);
};

}  // namespace lanewright::test
