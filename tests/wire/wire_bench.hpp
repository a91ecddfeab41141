#pragma once
// Purpose:   a board opened over a real link, and the steps that the tests of the wire take.
// Ownership: closes its board at the end.
// Threads:   one.

#include <catch2/catch.hpp>
#include <functional>
#include <memory>
#include <string>

#include "drivers/board/board.hpp"
#include "drivers/board/make_link.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright::tests {

// A hang must fail the test, not block it: SIGALRM ends the process.
struct Guard {
    explicit Guard(unsigned seconds);
    ~Guard();
};

class WireBench {
  public:
    explicit WireBench(BoardFile file, unsigned most_seconds = 60);
    ~WireBench();

    Result<void> open();  // the board is then in `board`
    std::unique_ptr<Board> board;

    template <class T>
    Result<T> run(Task<T> task) {
        return run_until_done(time, std::move(task));
    }

    boost::asio::io_context io;
    SteadyTimeSource time{io};

  private:
    Guard guard_;
    BoardFile file_;
};

Request margin_at(Codes codes);

// One reading, taken again where it is void (board reset, outcome unknown): what an engine does.
// `voids` counts those.
Task<LaneReading> read_until_valid(Board& board, Lane lane, Request request, std::uint32_t ordinal,
                                   int& voids);
Task<Applied> apply_until_valid(Board& board, Lane lane, Codes codes, int& voids);

}  // namespace lanewright::tests
