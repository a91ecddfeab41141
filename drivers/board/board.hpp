#pragma once
// Purpose:   one board, reached and known to be the right one: what the engine opens, uses, closes.
// Ownership: owns link, session, register map and reader; refers to the TimeSource. close() must
//            have finished before it is destroyed.
// Threads:   io thread.
//
// Use:       auto link = make_link(time, file.link);             // drivers/board/make_link.hpp
//            Result<std::unique_ptr<Board>> board =
//                co_await open_board(file, std::move(link), time);
//            if (!board) co_return board.error();                // nothing is left open
//            LaneReader& lanes = (*board)->lanes();
//            ...
//            co_await (*board)->close();

#include <cstdint>
#include <memory>
#include <optional>

#include "drivers/board/board_reader.hpp"
#include "drivers/board/lane_reader.hpp"
#include "drivers/board/session.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/io/link.hpp"
#include "drivers/io/time_source.hpp"
#include "drivers/registers/register_map.hpp"

namespace lanewright {

class Board {
  public:
    // For open_board: nothing is opened yet. The dialect is that of the board file.
    Board(BoardFile file, std::unique_ptr<Link> link, std::unique_ptr<Dialect> dialect,
          TimeSource& time);
    Task<void> open() { return session_.open(); }
    Board(const Board&) = delete;
    Board& operator=(const Board&) = delete;

    LaneReader& lanes() { return reader_; }
    Registers& registers() { return session_; }
    const Session& session() const { return session_; }
    const RegisterMap& map() const { return map_; }
    const BoardFile& file() const { return file_; }
    TimePoint now() const { return time_.now(); }
    // Resets that only the sentinel showed are counted in.
    SessionStatistics statistics() const {
        SessionStatistics out = session_.statistics();
        out.resets += reader_.resets();
        return out;
    }

    // Ends every call under way with Cause::stopped, then closes the link.
    Task<void> close() { return session_.close(); }

  private:
    TimeSource& time_;
    BoardFile file_;
    RegisterMap map_;
    IdentityCheck identity_;
    Session session_;
    BoardReader reader_;
};

// First contact, up to the right identity. Fails at once, rather than patiently, with the
// session's faults (session.hpp) or bad_config for a dialect that this program does not speak.
// `session_number` tells this program's requests from another's: random where it is not given.
Task<std::unique_ptr<Board>> open_board(BoardFile file, std::unique_ptr<Link> link,
                                        TimeSource& time,
                                        std::optional<std::uint32_t> session_number = {});

}  // namespace lanewright
