#include "drivers/board/board_reader.hpp"

#include <algorithm>
#include <utility>

#include "drivers/board/wire_record.hpp"

namespace lanewright {

BoardReader::BoardReader(BoardFile board, const RegisterMap& map, Registers& registers,
                         TimeSource& time)
    : board_(std::move(board)),
      map_(map),
      registers_(registers),
      time_(time),
      identity_(map, board_.identity),
      sentinel_(board_),
      never_(time.io()),
      monitor_of_lane_(board_.map.lane_count, board_.monitor.shared_by.size()) {
    for (const std::vector<std::uint16_t>& group : board_.monitor.shared_by) {
        for (const std::uint16_t lane : group) {
            if (lane < monitor_of_lane_.size()) monitor_of_lane_[lane] = monitors_.size();
        }
        monitors_.push_back(std::make_unique<Turnstile>(time.io()));
    }
}

Fault BoardReader::at(Lane lane, Fault fault) const {
    if (fault.board.empty()) fault.board = board_.name;
    if (!fault.lane && lane != board_wide) fault.lane = lane;
    return fault;
}

// In one batch where that fits, else part by part; the reply is that of the whole.
Task<BatchReply> BoardReader::run(Lane lane, Batch batch) {
    BatchReply whole;
    std::string why;
    std::size_t first = 0;
    while (first < batch.size()) {
        std::size_t count = batch.size() - first;
        Batch part = first == 0 ? batch : RegisterMap::part_of(batch, first, count);
        while (!registers_.fits(part, why) && count > 1) {
            count = (count + 1) / 2;
            part = RegisterMap::part_of(batch, first, count);
        }
        const TimePoint deadline = time_.now() + registers_.longest(part);
        Result<BatchReply> reply = co_await registers_.run(lane, std::move(part), deadline);
        if (!reply) co_return at(lane, reply.error());
        whole.results.insert(whole.results.end(), reply->results.begin(), reply->results.end());
        whole.results.resize(first + count);
        if (reply->outcome != Outcome::done) {
            whole.outcome = reply->outcome;
            whole.failed_at = first + reply->failed_at;
            whole.results.resize(batch.size());
            break;
        }
        first += count;
    }
    co_return whole;
}

Task<Identity> BoardReader::identify() {
    Result<Batch> batch = identity_.batch();
    if (!batch) co_return at(board_wide, batch.error());
    Result<BatchReply> reply = co_await run(board_wide, *batch);
    if (!reply) co_return reply.error();
    Result<Identity> identity = identity_.identity(*reply);
    if (!identity) co_return at(board_wide, identity.error());
    co_return std::move(*identity);
}

// A reset that another lane found by the sentinel, and that this one must hear of.
Result<void> BoardReader::not_reset(Lane lane) {
    sentinel_.told_by_dialect(registers_.resets());
    if (!sentinel_.must_be_told(lane)) return {};
    Fault fault;
    fault.cause = Cause::board_reset;
    fault.what = "the board was reset since this lane's last batch: its sentinel had fallen";
    fault.reg = sentinel_.field() ? sentinel_.field()->text() : "";
    return at(lane, fault);
}

// To be called behind not_reset: else the new sentinel would hide the reset from the lane.
Result<void> BoardReader::plant_sentinel(Lane lane, Compiled& compiled) {
    if (!sentinel_.declared() || sentinel_.stands(lane)) return {};
    return compiled.add_scratch(map_, lane, *sentinel_.field(), sentinel_.value());
}

Task<SavedLane> BoardReader::save(Lane lane) {
    const Result<void> standing = not_reset(lane);
    if (!standing) co_return standing.error();
    const std::vector<FieldName> names = fields_to_save(board_);
    Compiled compiled;
    std::vector<std::size_t> reads;
    for (const FieldName& name : names) {
        const Result<std::size_t> added = compiled.add_field(map_, lane, name);
        if (!added) co_return at(lane, added.error());
        reads.push_back(*added);
    }
    const std::uint64_t generation = sentinel_.generation();
    const Result<void> planted = plant_sentinel(lane, compiled);
    if (!planted) co_return at(lane, planted.error());
    Result<BatchReply> reply = co_await run(lane, compiled.batch());
    if (!reply) co_return reply.error();
    const Result<void> whole = map_.check_reply(compiled.batch(), *reply);
    if (!whole) co_return at(lane, whole.error());
    sentinel_.written(lane, generation);
    SavedLane saved;
    saved.lane = lane;
    for (std::size_t i = 0; i < names.size(); ++i) {
        const Result<FieldPlace> place = map_.place(lane, names[i]);
        if (!place) co_return at(lane, place.error());
        const FieldDescription& field = *map_.find(names[i]);
        SavedField each;
        each.field = names[i];
        each.address = place->address;
        each.mask = place->mask;
        each.value = compiled.field(reads[i], *reply).value_or(0);
        each.lowest = field.lowest_allowed();
        each.highest = field.highest_allowed();
        each.role = field.role;
        for (const DimensionDescription& dimension : board_.dimensions) {
            if (dimension.field == names[i]) each.dimension = dimension.name;
        }
        saved.fields.push_back(std::move(each));
    }
    co_return saved;
}

Task<Codes> BoardReader::codes(Lane lane) {
    Batch batch;
    for (const DimensionDescription& dimension : board_.dimensions) {
        const Result<void> added = map_.read(batch, lane, dimension.field);
        if (!added) co_return at(lane, added.error());
    }
    Result<BatchReply> reply = co_await run(lane, batch);
    if (!reply) co_return reply.error();
    const Result<void> whole = map_.check_reply(batch, *reply);
    if (!whole) co_return at(lane, whole.error());
    Codes codes;
    for (std::size_t i = 0; i < board_.dimensions.size(); ++i) {
        const Result<FieldPlace> place = map_.place(lane, board_.dimensions[i].field);
        if (!place) co_return at(lane, place.error());
        codes.value.push_back(
            static_cast<std::int32_t>(place->value_in(reply->results[i].value_or(0))));
    }
    co_return codes;
}

Task<SequenceValues> BoardReader::values_for(Lane lane, Codes wanted) {
    const Result<void> allowed = map_.check_codes(lane, wanted);
    if (!allowed) co_return at(lane, allowed.error());
    SequenceValues values;
    values.codes = std::move(wanted);
    values.bit_rate_gbps = board_.bit_rate_gbps;
    if (!map_.has_strobe()) {
        Result<Codes> standing = co_await codes(lane);
        if (!standing) co_return standing.error();
        values.standing = std::move(*standing);
    }
    co_return values;
}

// Carries the compiled sequences out. A missed lock is no fault; the batch ended there.
Task<BoardReader::Carried> BoardReader::carry(Lane lane, Compiled compiled) {
    Carried out;
    Result<BatchReply> reply = co_await run(lane, compiled.batch());
    if (!reply) co_return reply.error();
    out.reply = std::move(*reply);
    out.wire = wire_record(compiled.batch(), out.reply);
    const Result<void> whole = map_.check_reply(compiled.batch(), out.reply);
    if (whole) co_return out;
    out.missed = compiled.lock_missed(out.reply);
    if (whole.error().cause != Cause::wait_expired || !out.missed) {
        co_return at(lane, whole.error());
    }
    co_return out;
}

// The same where the apply sequence was added first: what it has behind its wait for lock is
// carried out although lock does not come, so that nothing stays held.
Task<BoardReader::Carried> BoardReader::carry_out(Lane lane, Compiled compiled,
                                                  SequenceValues values) {
    Result<Carried> first = co_await carry(lane, compiled);
    if (!first) co_return first.error();
    Carried out = std::move(*first);
    if (out.locked() || out.missed->added > 0) co_return out;
    Compiled rest;
    const Result<void> added =
        rest.add(map_, board_.dimensions, board_.apply, out.missed->step + 1, lane, values);
    if (!added) co_return at(lane, added.error());
    if (rest.batch().empty()) co_return out;
    Result<Carried> carried = co_await carry_out(lane, rest, values);
    if (!carried) co_return carried.error();
    out.wire.insert(out.wire.end(), carried->wire.begin(), carried->wire.end());
    co_return out;
}

Task<Applied> BoardReader::apply(Lane lane, Codes wanted) {
    Result<SequenceValues> values = co_await values_for(lane, std::move(wanted));
    if (!values) co_return values.error();
    Compiled compiled;
    const Result<void> added =
        compiled.add(map_, board_.dimensions, board_.apply, 0, lane, *values);
    if (!added) co_return at(lane, added.error());
    Result<Carried> carried = co_await carry_out(lane, compiled, *values);
    if (!carried) co_return carried.error();
    Applied applied;
    applied.codes = compiled.codes_read_back(carried->reply);
    applied.locked = carried->locked();
    applied.wire = std::move(carried->wire);
    co_return applied;
}

Task<Codes> BoardReader::restore(Lane lane, SavedLane saved) {
    Codes wanted;
    Batch others;
    for (const DimensionDescription& dimension : board_.dimensions) {
        const auto found =
            std::find_if(saved.fields.begin(), saved.fields.end(),
                         [&](const SavedField& each) { return each.field == dimension.field; });
        if (found == saved.fields.end()) {
            co_return at(lane, not_allowed("nothing was saved for " + dimension.field.text(),
                                           dimension.field.text(), lane));
        }
        wanted.value.push_back(static_cast<std::int32_t>(found->value));
    }
    for (const SavedField& each : saved.fields) {
        if (each.role == Role::tuned) continue;
        const Result<void> added = map_.write_declared(others, lane, each.field, each.value);
        if (!added) co_return at(lane, added.error());
    }
    Result<Applied> applied = co_await apply(lane, std::move(wanted));
    if (!applied) co_return applied.error();
    Result<BatchReply> reply = co_await run(lane, others);
    if (!reply) co_return reply.error();
    const Result<void> whole = map_.check_reply(others, *reply);
    if (!whole) co_return at(lane, whole.error());
    co_return co_await codes(lane);
}

Task<void> BoardReader::bring_up(Lane lane) {
    const Result<void> standing = not_reset(lane);
    if (!standing) co_return standing.error();
    SequenceValues values;
    values.bit_rate_gbps = board_.bit_rate_gbps;
    Compiled compiled;
    const std::uint64_t generation = sentinel_.generation();
    Result<void> added = plant_sentinel(lane, compiled);
    if (added) added = compiled.add(map_, board_.dimensions, board_.bring_up, 0, lane, values);
    if (!added) co_return at(lane, added.error());
    Result<BatchReply> reply = co_await run(lane, compiled.batch());
    if (!reply) co_return reply.error();
    const Result<void> whole = map_.check_reply(compiled.batch(), *reply);
    if (!whole && !compiled.lock_missed(*reply)) co_return at(lane, whole.error());
    sentinel_.written(lane, generation);
    co_return Result<void>{};
}

Task<std::vector<StatusItem>> BoardReader::status(Lane lane) {
    std::vector<StatusItem> items;
    std::vector<std::size_t> reads;
    Compiled compiled;
    for (const StatusExpectation& each : board_.preflight.items) {
        const Result<std::size_t> added = compiled.add_field(map_, lane, each.field);
        if (!added) co_return at(lane, added.error());
        reads.push_back(*added);
    }
    if (reads.empty()) co_return items;
    Result<BatchReply> reply = co_await run(lane, compiled.batch());
    if (!reply) co_return reply.error();
    const Result<void> whole = map_.check_reply(compiled.batch(), *reply);
    if (!whole) co_return at(lane, whole.error());
    for (std::size_t i = 0; i < reads.size(); ++i) {
        const StatusExpectation& each = board_.preflight.items[i];
        StatusItem item;
        item.name = each.name;
        item.field = each.field;
        item.found = compiled.field(reads[i], *reply).value_or(0);
        item.expected = each.equals_lane ? number(lane) : each.equals;
        items.push_back(std::move(item));
    }
    co_return items;
}

}  // namespace lanewright
