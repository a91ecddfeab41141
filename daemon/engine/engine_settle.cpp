// What stands on the board: restored, decided, given up; and the note that remembers it.

#include <algorithm>
#include <set>
#include <utility>

#include "daemon/engine/engine_job.hpp"

namespace lanewright {

namespace {

using namespace std::chrono_literals;

// Writing the final codes is tried again after a reset; more than this is a broken board.
constexpr int settle_attempts = 4;

}  // namespace

Result<void> Engine::note_changed() {
    return write_note(bench_.note_path, plan_.note);
}

// Whether the lane's decided codes are to stay on the chip, should the run end now.
bool Engine::keeps_decision(const LaneState& lane) const {
    return lane.decision && plan_.recipe.afterwards == Afterwards::leave &&
           !(lane.finished && lane.finished->outcome == LaneOutcome::failed);
}

SavedLane Engine::resting(const LaneState& lane) const {
    return keeps_decision(lane) ? with_codes(*lane.saved, lane.decision->codes) : *lane.saved;
}

// After a reset every lane of the board holds its reset codes, those that had been settled too.
void Engine::board_was_reset(Lane told_by) {
    if (const auto job = jobs_.find(number(told_by)); job != jobs_.end()) {
        job->second.was_reset = true;
    }
    const std::uint64_t resets = bench_.link_counts().resets;
    if (resets == resets_known_)
        return;  // another lane has told; lanes may be settled again by now
    resets_known_ = resets;
    bench_.say("the board has reset; lanes outside this run hold their reset codes now");
    for (auto& [number_of_lane, job] : jobs_) job.was_reset = true;
    bool changed = false;
    for (auto& [number_of_lane, lane] : state_.lanes) {
        if (!lane.saved || lane.moved || lane.settled == Settlement::given_up) continue;
        lane.moved = true;
        plan_.note.set(resting(lane));
        changed = true;
    }
    if (!changed) return;
    if (auto noted = note_changed(); !noted) bench_.say(noted.error().text());
}

Task<bool> Engine::fail_lane(Lane lane, Fault fault) {
    if (const LaneState& known = state_.lanes[number(lane)]; known.saved && known.moved) {
        auto settling = settle(lane, Settlement::restored, *known.former());
        if (auto settled = co_await std::move(settling); !settled) co_return settled.error();
    }
    auto storing = append(LaneFinished{lane, LaneOutcome::failed, fault.text()});
    if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
    co_return true;
}

// Puts the lane's codes where they are to stay. The board is asked even where nothing can be stored
// any more.
Task<void> Engine::settle(Lane lane, Settlement settlement, Codes codes) {
    const SavedLane wanted = with_codes(*state_.lanes[number(lane)].saved, codes);
    Fault last;
    for (int attempt = 0; attempt < settle_attempts; ++attempt) {
        if (std::exchange(jobs_[number(lane)].was_reset, false)) {
            auto up = co_await bench_.reader.bring_up(lane);
            if (!up) last = up.error();
        }
        auto written = co_await bench_.reader.restore(lane, wanted);
        if (written) {
            state_.lanes[number(lane)].moved = false;
            const std::uint64_t resets_before = resets_known_;
            auto storing = append(LaneSettled{lane, settlement, std::move(*written)});
            auto stored = co_await std::move(storing);
            if (resets_known_ != resets_before) {
                // Another lane met a reset while this one's row was being stored: the codes are
                // gone again, and settle_rest writes them.
                state_.lanes[number(lane)].moved = true;
            } else {
                plan_.note.drop(lane);
            }
            if (auto noted = note_changed(); !noted) co_return noted.error();
            if (!stored) co_return stored.error();
            co_return Result<void>{};
        }
        last = written.error();
        if (last.cause == Cause::board_reset) board_was_reset(lane);
        if (reaction_to(last.cause) != Reaction::read_anew) break;
        co_await bench_.time.sleep_until(bench_.time.now() + 20ms);
        jobs_[number(lane)].was_reset = true;
    }
    co_return last;
}

// Something else writes the lane's codes: writing there again would only fight it. What stands is
// kept in the store, and no later contact restores the lane either.
Task<bool> Engine::give_up(Lane lane) {
    auto standing = co_await bench_.reader.codes(lane);
    LaneSettled settled{lane, Settlement::given_up, {}};
    if (standing) settled.codes = std::move(*standing);
    bench_.say(
        "lane " + std::to_string(number(lane)) +
        ": something else writes its codes; it is left as it is and not written to any more");
    auto storing = append(std::move(settled));
    if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
    plan_.note.drop(lane);
    if (auto noted = note_changed(); !noted) co_return noted.error();
    co_return true;
}

// Lanes that an early end, or a reset after they were settled, left in codes nobody wants. A reset
// meanwhile undoes what was settled before it, so there is more than one pass.
Task<void> Engine::settle_rest() {
    constexpr int passes = 3;
    Result<void> outcome;
    std::set<std::uint16_t> given_up;
    for (int pass = 0; pass < passes; ++pass) {
        for (auto& [number_of_lane, lane] : state_.lanes) {
            if (!lane.saved || !lane.moved || given_up.contains(number_of_lane)) continue;
            if (lane.codes_changed >= most_codes_changed) {
                auto left = co_await give_up(Lane{number_of_lane});
                if (!left && outcome) outcome = left.error();
                continue;
            }
            const Settlement settlement =
                keeps_decision(lane) ? Settlement::decided : Settlement::restored;
            const Codes codes = codes_of(resting(lane));
            auto settled = co_await settle(Lane{number_of_lane}, settlement, codes);
            if (settled || !lane.moved) continue;  // on the board, even if it could not be stored
            given_up.insert(number_of_lane);
            if (outcome) outcome = settled.error();
        }
    }
    for (const auto& [number_of_lane, lane] : state_.lanes) {
        if (!lane.saved || !lane.moved) {
            plan_.note.drop(Lane{number_of_lane});
        } else {
            unsettled_ += (unsettled_.empty() ? "" : ", ") + std::to_string(number_of_lane);
        }
    }
    if (auto noted = note_changed(); !noted && outcome) outcome = noted.error();
    co_return outcome;
}

std::string Engine::unsettled_sentence() const {
    return "Lanes " + unsettled_ + " do not hold the codes they should; these stand in " +
           bench_.note_path + " and are written at the next contact";
}

void Engine::add_unsettled(Fault& fault) const {
    if (unsettled_.empty()) return;
    fault.hint += (fault.hint.empty() ? "" : " ") + unsettled_sentence();
}

Task<void> settle_note(RestoreNote note, Identity present, Bench bench, bool in_journal,
                       std::string why) {
    if (!same_board(note.identity, present)) {
        Fault fault;
        fault.cause = Cause::wrong_board;
        fault.what = "codes wait to be restored on another board than the one that is here now";
        fault.board = note.board;
        fault.hint = "Connect that board, or move " + bench.note_path +
                     " away once its codes were written by hand";
        co_return fault;
    }
    const std::vector<SavedLane> lanes = note.lanes;
    for (const SavedLane& lane : lanes) {
        auto written = co_await bench.reader.restore(lane.lane, lane);
        if (!written) co_return written.error();
        if (in_journal) {
            std::vector<Event> event;
            event.push_back(CodesWritten{lane.lane, std::move(*written), why});
            auto stored = co_await bench.journal.append(note.run, std::move(event));
            if (!stored) co_return stored.error();
        }
        note.drop(lane.lane);
        if (auto noted = write_note(bench.note_path, note); !noted) co_return noted.error();
    }
    co_return Result<void>{};
}

}  // namespace lanewright
