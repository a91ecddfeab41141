#include "drivers/board/check.hpp"

#include <algorithm>
#include <utility>

namespace lanewright {

namespace {

// Every bit is seen as 0 and as 1, and next to its opposite.
constexpr std::uint32_t patterns[] = {0x00000000u, 0xFFFFFFFFu, 0x55555555u,
                                      0xAAAAAAAAu, 0x0F0F0F0Fu, 0x12345678u};

Task<BatchReply> run(Board* board, Batch batch) {
    const TimePoint deadline = board->now() + board->registers().longest(batch);
    co_return co_await board->registers().run(board_wide, std::move(batch), deadline);
}

Task<std::uint32_t> read_scratch(Board* board, FieldName field) {
    Batch batch;
    const Result<FieldPlace> place = board->map().place(Lane{0}, field);
    if (!place) co_return place.error();
    const Result<void> added = board->map().read(batch, Lane{0}, field);
    if (!added) co_return added.error();
    Result<BatchReply> reply = co_await run(board, batch);
    if (!reply) co_return reply.error();
    const Result<void> whole = board->map().check_reply(batch, *reply);
    if (!whole) co_return whole.error();
    co_return place->value_in(reply->results.front().value_or(0));
}

Task<ScratchTrial> try_scratch(Board* board, FieldName field, std::uint32_t value) {
    Batch batch;
    const Result<FieldPlace> place = board->map().place(Lane{0}, field);
    if (!place) co_return place.error();
    Result<void> added = board->map().write_declared(batch, Lane{0}, field, value);
    if (added) added = board->map().read(batch, Lane{0}, field);
    if (!added) co_return added.error();
    Result<BatchReply> reply = co_await run(board, batch);
    if (!reply) co_return reply.error();
    const Result<void> whole = board->map().check_reply(batch, *reply);
    if (!whole && whole.error().cause != Cause::not_accepted) co_return whole.error();
    std::uint32_t seen = 0;
    for (const std::optional<std::uint32_t>& result : reply->results) {
        if (result) seen = *result;  // the last one that was carried out
    }
    co_return ScratchTrial{value, place->value_in(seen)};
}

Task<CheckReport> check(Board* board, unsigned reads) {
    CheckReport report;
    report.scratch = board->file().scratch;
    Result<Identity> identity = co_await board->lanes().identify();
    if (!identity) co_return identity.error();
    report.identity = std::move(*identity);
    const FieldDescription* field = board->map().find(report.scratch);
    if (field == nullptr) {
        co_return not_allowed("the register map has no field " + report.scratch.text(),
                              report.scratch.text(), std::nullopt);
    }
    Result<std::uint32_t> found = co_await read_scratch(board, report.scratch);
    if (!found) co_return found.error();
    for (const std::uint32_t pattern : patterns) {
        const std::uint32_t all = field->mask() >> field->low_bit;
        const std::uint32_t value =
            std::clamp(pattern & all, field->lowest_allowed(), field->highest_allowed());
        Result<ScratchTrial> trial = co_await try_scratch(board, report.scratch, value);
        if (!trial) co_return trial.error();
        report.trials.push_back(*trial);
    }
    // A value found outside the field's limits cannot be put back; that is said, not hidden.
    Result<ScratchTrial> back = co_await try_scratch(board, report.scratch, *found);
    if (!back && back.error().cause != Cause::not_allowed) co_return back.error();
    report.scratch_put_back = back && back->right();
    for (unsigned i = 0; i < reads; ++i) {
        Result<std::uint32_t> value = co_await read_scratch(board, report.scratch);
        if (!value) co_return value.error();
    }
    report.link = board->statistics();
    report.round_trips = board->session().round_trips();
    report.dialect = board->session().dialect_traits().name;
    report.most_operations = board->session().dialect_traits().most_operations;
    report.in_flight = board->session().dialect_traits().in_flight;
    report.link_name = board->session().link_traits().name;
    report.warnings = board->session().link_traits().warnings;
    co_return report;
}

}  // namespace

bool CheckReport::good() const {
    return scratch_put_back && !trials.empty() &&
           std::all_of(trials.begin(), trials.end(),
                       [](const ScratchTrial& trial) { return trial.right(); });
}

Task<CheckReport> check_board(Board& board, unsigned reads) {
    return check(&board, reads);
}

}  // namespace lanewright
