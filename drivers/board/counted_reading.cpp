// One reading of a counted monitor: codes and origin first, then looks by the batch.

#include <algorithm>
#include <numeric>
#include <optional>
#include <string>
#include <tuple>
#include <utility>

#include "adapt/margin/edge_search.hpp"
#include "drivers/board/board_reader.hpp"
#include "drivers/board/counted_look.hpp"

namespace lanewright {

namespace {

// A search that goes on for ever is a fault of ours; the board must not pay for it.
constexpr std::size_t search_limit = 100;

Fault fault_of(Cause cause, std::string what, std::string hint) {
    Fault fault;
    fault.cause = cause;
    fault.what = std::move(what);
    fault.hint = std::move(hint);
    return fault;
}

Result<void> can_be_counted(const LookScale& scale, const Request& request) {
    if (const auto* margin = std::get_if<MarginWanted>(&request.what)) {
        if (margin->error_ratio > 0 && margin->error_ratio < 0.5 && margin->dwell_bits > 0) {
            return {};
        }
        return fault_of(Cause::bad_config,
                        "a margin needs an error ratio between 0 and 0.5 and a dwell",
                        "Correct error ratio and dwell in the recipe");
    }
    const auto& looks = std::get<LooksWanted>(request.what).looks;
    if (looks.empty()) {
        return fault_of(Cause::bad_config, "a reading of no looks", "Ask for at least one look");
    }
    for (const Look& look : looks) {
        if (const Result<void> good = scale.check(look); !good) return good;
    }
    return {};
}

// Looks of one batch are taken in the order in which the least has to be written: a field that
// stays as it is isn't written again. Which of them comes first is nothing to their counts.
std::vector<std::size_t> order_of_fewest_writes(const std::vector<Look>& looks) {
    std::vector<std::size_t> order(looks.size());
    std::iota(order.begin(), order.end(), std::size_t{0});
    std::stable_sort(order.begin(), order.end(), [&looks](std::size_t one, std::size_t other) {
        const Look &a = looks[one], &b = looks[other];
        return std::tie(a.bits, a.phase_ui, a.offset_mv) <
               std::tie(b.bits, b.phase_ui, b.offset_mv);
    });
    return order;
}

// Where the board file reads no origin it stays at the centres.
Result<void> take_origin(const Compiled::Values& values, LookScale& scale) {
    const auto offset = values.find("offset"), phase = values.find("phase");
    if (offset == values.end() || phase == values.end()) return {};
    return scale.set_origin(offset->second, phase->second);
}

}  // namespace

struct BoardReader::LookJob {
    LookScale scale;
    SequenceValues values;
    ReadingEnd end;
    Compiled::Standing standing;  // what this reading's looks have written
    std::optional<EdgeSearch> search;
    std::vector<Look> given;  // where there is no search
    LaneReading out;
    bool locked = true;
    bool ended = false;  // what ends a reading was read behind the last look
};

// At worst, each look in a batch of its own.
std::chrono::nanoseconds BoardReader::longest_of(Lane lane, const LookJob& job,
                                                 const Compiled& begin) const {
    const CountedDescription& counted = board_.monitor.counted;
    Look longest;
    longest.bits = job.given.empty() ? counted.most_bits : 0;
    for (const Look& look : job.given) longest.bits = std::max(longest.bits, look.bits);
    const auto looks =
        static_cast<std::int64_t>(std::max<std::size_t>(counted.most_looks, job.given.size()));
    SequenceValues values = job.values;
    job.scale.tell(job.scale.placed(longest), values);
    Compiled one;
    const Result<void> added = one.add(map_, board_.dimensions, counted.look, 0, lane, values);
    const std::chrono::nanoseconds each =
        added ? registers_.longest(one.batch()) : std::chrono::nanoseconds{};
    return registers_.longest(begin.batch()) + looks * each;
}

// Puts their counts behind those that the reading has, in the order of the looks. Where lock goes
// meanwhile, the batch's counts mean nothing and are left out. `last` also ends the reading.
Task<void> BoardReader::take_looks(Lane lane, LookJob* job, std::vector<Look> looks, bool last) {
    for (Look& look : looks) look = job->scale.placed(look);
    const std::vector<std::size_t> order = order_of_fewest_writes(looks);
    Compiled compiled(job->standing);
    for (const std::size_t i : order) {
        job->scale.tell(looks[i], job->values);
        const Result<void> added = compiled.add(map_, board_.dimensions,
                                                board_.monitor.counted.look, 0, lane, job->values);
        if (!added) co_return at(lane, added.error());
    }
    const Result<void> ended = last ? job->end.add(compiled) : Result<void>{};
    if (!ended) co_return at(lane, ended.error());
    Result<Carried> carried = co_await carry(lane, compiled);
    if (!carried) co_return carried.error();
    job->standing = compiled.standing();
    job->out.wire.insert(job->out.wire.end(), carried->wire.begin(), carried->wire.end());
    job->locked = carried->locked();
    if (!job->locked) co_return Result<void>{};
    std::vector<Count> counts(looks.size());
    for (std::size_t k = 0; k < order.size(); ++k) {
        const Result<Count> count =
            job->scale.count(looks[order[k]], compiled.values(carried->reply, k));
        if (!count) co_return at(lane, count.error());
        counts[order[k]] = *count;
    }
    std::vector<Count>& all = job->out.reading.counts;
    all.insert(all.end(), counts.begin(), counts.end());
    job->ended = last;
    if (!last) co_return Result<void>{};
    co_return finish(lane, job->end, compiled, carried->reply, job->out);
}

Task<void> BoardReader::look_around(Lane lane, LookJob* job) {
    const CountedDescription& counted = board_.monitor.counted;
    const std::vector<Count>& counts = job->out.reading.counts;
    while (job->locked) {
        std::vector<Look> looks;
        if (job->search) {
            looks = job->search->next(counted.looks_a_batch);
        } else {
            const auto first = job->given.begin() + static_cast<std::ptrdiff_t>(counts.size());
            const auto left = static_cast<std::size_t>(job->given.end() - first);
            const std::size_t size = std::min<std::size_t>(counted.looks_a_batch, left);
            looks.assign(first, first + static_cast<std::ptrdiff_t>(size));
        }
        if (looks.empty()) break;
        const std::size_t before = counts.size();
        if (job->search && before > search_limit * counted.most_looks) {
            co_return at(lane, fault_of(Cause::internal, "the search for the edges does not end",
                                        "Report this with the board file"));
        }
        // A search that has all its looks is over; one that ends earlier is not foreseen.
        const std::size_t enough = job->search ? counted.most_looks : job->given.size();
        const bool last = before + looks.size() >= enough;
        const Result<void> taken = co_await take_looks(lane, job, std::move(looks), last);
        if (!taken) co_return taken.error();
        if (job->search && job->locked) {
            job->search->told(std::span<const Count>(counts).subspan(before));
        }
    }
    co_return Result<void>{};
}

namespace {

// The reading behind the counts; what the caller knows of it is kept.
Result<Reading> with_edges(Reading known, const EdgeSearch* search) {
    if (search == nullptr) {
        known.status = Status::open;
        return known;
    }
    std::optional<Reading> found = search->result();
    if (!found) {
        return fault_of(Cause::internal, "the search for the edges ended without a result",
                        "Report this with the board file");
    }
    found->codes = std::move(known.codes);
    found->condition = known.condition;
    found->counts = std::move(known.counts);
    found->telemetry = std::move(known.telemetry);
    return std::move(*found);
}

}  // namespace

Task<LaneReading> BoardReader::read_counted(Lane lane, Request request, std::uint32_t ordinal) {
    const MonitorDescription& monitor = board_.monitor;
    LookScale scale(board_);
    const Result<void> countable = can_be_counted(scale, request);
    if (!countable) co_return at(lane, countable.error());
    Result<SequenceValues> values = co_await values_for(lane, request.codes);
    if (!values) co_return values.error();
    values->ordinal = ordinal;
    Result<Compiled> begin = begin_reading(lane, request, *values);
    if (!begin) co_return begin.error();
    Result<void> added =
        begin->add(map_, board_.dimensions, monitor.counted.begin, 0, lane, *values);
    if (added) {
        added =
            begin->add(map_, board_.dimensions, monitor.counted.origin.sequence, 0, lane, *values);
    }
    if (!added) co_return at(lane, added.error());

    ReadingEnd end(board_, map_, sentinel_, lane);
    LookJob job{scale, *values, end, begin->standing(), {}, {}, {}, true, false};
    const auto* margin = std::get_if<MarginWanted>(&request.what);
    if (margin == nullptr) job.given = std::get<LooksWanted>(request.what).looks;
    Result<Turnstile::Pass> pass = co_await take_monitor(lane, longest_of(lane, job, *begin));
    if (!pass) co_return pass.error();
    Result<Carried> carried = co_await carry_out(lane, *begin, *values);
    if (!carried) co_return carried.error();
    Reading& reading = job.out.reading;
    reading.codes = begin->codes_read_back(carried->reply);
    reading.condition = request.condition;
    job.out.wire = std::move(carried->wire);
    job.locked = carried->locked();
    if (job.locked) {
        const Result<void> placed = take_origin(begin->values(carried->reply, 2), job.scale);
        if (!placed) co_return at(lane, placed.error());
    }
    if (margin != nullptr) job.search.emplace(*margin, job.scale.grid());
    const Result<void> looked = co_await look_around(lane, &job);
    if (!looked) co_return looked.error();
    pass->leave();
    co_return co_await counted_reading_of(lane, std::move(job), std::move(request));
}

Task<LaneReading> BoardReader::counted_reading_of(Lane lane, LookJob job, Request request) {
    const EdgeSearch* search = job.search ? &*job.search : nullptr;
    LaneReading out = std::move(job.out);
    if (!job.ended) {
        Result<LaneReading> ended = co_await end_alone(lane, job.end, std::move(out));
        if (!ended) co_return ended.error();
        out = std::move(*ended);
    }
    if (job.locked) {
        Result<Reading> reading = with_edges(std::move(out.reading), search);
        if (!reading) co_return at(lane, reading.error());
        out.reading = std::move(*reading);
    } else {
        out.reading.status = Status::no_lock;
    }
    Reading& reading = out.reading;
    reading.error_definition = job.scale.grid().error_definition;
    if (const auto* margin = std::get_if<MarginWanted>(&request.what)) {
        if (!job.locked) reading.error_ratio = margin->error_ratio;
    }
    reading.bit_count = 0;
    for (const Count& count : reading.counts) reading.bit_count += count.look.bits;
    reading.cost_s = board_.cost.settle_s + request.wait_s +
                     static_cast<double>(reading.counts.size()) * board_.cost.per_look_s +
                     static_cast<double>(reading.bit_count) / (board_.bit_rate_gbps * 1e9);
    if (job.locked && !board_.monitor.counted.origin.sequence.empty()) {
        reading.telemetry.push_back({"origin_mv", job.scale.origin_mv()});
        reading.telemetry.push_back({"origin_ui", job.scale.origin_ui()});
    }
    co_return out;
}

}  // namespace lanewright
