#include "tests/wire/wire_bench.hpp"

#include <unistd.h>

namespace lanewright::tests {

namespace {

constexpr int most_voids = 20;

bool is_void(const Fault& fault) {
    return fault.cause == Cause::board_reset || fault.cause == Cause::outcome_unknown;
}

}  // namespace

Guard::Guard(unsigned seconds) {
    ::alarm(seconds);
}
Guard::~Guard() {
    ::alarm(0);
}

WireBench::WireBench(BoardFile file, unsigned most_seconds)
    : guard_(most_seconds), file_(std::move(file)) {}

WireBench::~WireBench() {
    if (board) run(board->close());
}

Result<void> WireBench::open() {
    auto opened = run(open_board(file_, make_link(time, file_.link), time));
    if (opened.has_error()) return opened.error();
    board = std::move(*opened);
    return {};
}

Request margin_at(Codes codes) {
    Request request;
    request.codes = std::move(codes);
    request.what = MarginWanted{.error_ratio = 1e-6, .dwell_bits = 1u << 22};
    return request;
}

Task<LaneReading> read_until_valid(Board& board, Lane lane, Request request, std::uint32_t ordinal,
                                   int& voids) {
    for (;;) {
        auto reading = co_await board.lanes().read(lane, request, ordinal);
        if (reading.has_value() || !is_void(reading.error()) || ++voids > most_voids) {
            co_return reading;
        }
        auto up = co_await board.lanes().bring_up(lane);
        if (up.has_error() && !is_void(up.error())) co_return up.error();
    }
}

Task<Applied> apply_until_valid(Board& board, Lane lane, Codes codes, int& voids) {
    for (;;) {
        auto applied = co_await board.lanes().apply(lane, codes);
        if (applied.has_value() || !is_void(applied.error()) || ++voids > most_voids) {
            co_return applied;
        }
        auto up = co_await board.lanes().bring_up(lane);
        if (up.has_error() && !is_void(up.error())) co_return up.error();
    }
}

}  // namespace lanewright::tests
