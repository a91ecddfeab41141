#include "daemon/cli/board_at_hand.hpp"

#include <utility>

#include "daemon/cli/terminal.hpp"
#include "drivers/board/make_link.hpp"

namespace lanewright {

Fault fault_of(const Complaints& complaints) {
    Fault fault;
    fault.cause = Cause::bad_config;
    const std::size_t count = complaints.all().size();
    std::string text = complaints.text();
    while (!text.empty() && text.back() == '\n') text.pop_back();
    fault.what = std::to_string(count) +
                 (count == 1 ? " error in the files:\n" : " errors in the files:\n") + text;
    return fault;
}

Result<BoardAtHand> take_board(const std::string& board_path, const std::string& link) {
    Complaints complaints;
    auto file = load_board_file(board_path, complaints);
    if (!file) return fault_of(complaints);
    BoardAtHand out;
    out.file = std::move(*file);
    if (!link.empty()) {
        std::string why;
        auto other = parse_link(link, out.file.link, why);
        if (!other) {
            Fault fault;
            fault.cause = Cause::bad_config;
            fault.what = "--link " + link + ": " + why;
            return fault;
        }
        out.file.link = std::move(*other);
    }
    auto endpoint = Endpoint::take(out.file.link);
    if (!endpoint) {
        Fault fault = endpoint.error();
        fault.board = out.file.name;
        return fault;
    }
    out.endpoint = std::move(*endpoint);
    return out;
}

Task<std::unique_ptr<Board>> reach(BoardFile file, TimeSource* time) {
    auto link = make_link(*time, file.link);
    auto board = co_await open_board(std::move(file), std::move(link), *time);
    if (board) {
        for (const std::string& warning : (*board)->session().link_traits().warnings) {
            print_error("lanewright: " + warning);
        }
    }
    co_return board;
}

LinkCounts counts_of(const Board& board) {
    const SessionStatistics counts = board.statistics();
    return {counts.frames, counts.bad_frames, counts.retries, counts.reconnects, counts.resets};
}

}  // namespace lanewright
