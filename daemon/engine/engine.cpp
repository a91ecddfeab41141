#include "daemon/engine/engine.hpp"

#include <algorithm>
#include <map>
#include <memory>
#include <optional>
#include <set>
#include <utility>

#include "drivers/io/task_group.hpp"

namespace lanewright {

namespace {

using namespace std::chrono_literals;

// Writing the final codes is tried again after a reset; more than this is a broken board.
constexpr int settle_attempts = 4;
constexpr std::uint32_t save_attempts = 6;
constexpr const char* not_restorable =
    "the codes on the chip lie outside the board file's limits or are forbidden, so that they "
    "could "
    "not be restored; nothing was written. Set allowed codes first, or correct the board file";

// What a fault of one register transaction means for the lane and the run.
enum class Reaction { read_anew, fail_lane, end_run };

Reaction reaction_to(Cause cause) {
    switch (cause) {
        case Cause::board_reset:
        case Cause::outcome_unknown:
        case Cause::not_accepted:
        case Cause::wait_expired:
            return Reaction::read_anew;
        case Cause::refused:
        case Cause::not_allowed:
            return Reaction::fail_lane;
        default:
            return Reaction::end_run;
    }
}

// How long until a lane tries again after a void reading: a board that has just reset needs a
// moment, and one that keeps failing must not be hammered.
std::chrono::nanoseconds pause_before(std::uint32_t attempt) {
    return std::min<std::chrono::nanoseconds>(5ms * (1 << std::min(attempt, 8u)), 1s);
}

class Engine {
  public:
    Engine(RunPlan plan, Bench bench) : plan_(std::move(plan)), bench_(std::move(bench)) {}

    Task<RunEnded> run(std::vector<StoredEvent> history);

  private:
    struct LaneJob {
        std::unique_ptr<LaneMachine> machine;
        std::vector<Event> unseen;  // stored, not yet told to the machine
    };

    void make_jobs();
    void take_history(const std::vector<StoredEvent>& history);
    Task<SavedLane> save_lane(Lane lane);
    Task<void> save_lanes();
    Task<void> run_waves();
    Task<void> lane_task(Lane lane);
    Task<bool> carry_out(Lane lane, Action action);
    Task<bool> measure(Lane lane, DoMeasure what);
    Task<bool> reading_failed(Lane lane, DoMeasure what, Fault fault);
    Task<bool> fail_lane(Lane lane, Fault fault);
    Task<void> settle(Lane lane, Settlement settlement, Codes codes);
    Task<void> settle_rest();
    Task<void> append(std::vector<Event> events);
    Task<void> append(Event event);  // name its task before waiting for it: g++ 12.2 destroys
                                     // aggregate temporaries of a co_await expression twice
    Result<void> note_changed();
    bool keeps_decision(const LaneState& lane) const;
    SavedLane resting(const LaneState& lane) const;
    void board_was_reset();
    bool should_stop() const;
    std::string unsettled_sentence() const;
    void add_unsettled(Fault& fault) const;
    RunEnded ended(const Result<void>& outcome) const;

    RunPlan plan_;
    Bench bench_;
    RunState state_;
    std::map<std::uint16_t, LaneJob> jobs_;
    TimePoint started_{};
    std::uint64_t resets_known_ = 0;
    bool failed_ = false;    // a lane met what ends the run, or the store does
    std::string unsettled_;  // what could not be put where it belongs, for the run's last words
};

void Engine::make_jobs() {
    for (const std::uint16_t lane : plan_.manifest.lanes) {
        LaneJob& job = jobs_[lane];
        job.machine = std::make_unique<LaneMachine>(
            lane_setup_of(plan_.board, plan_.recipe, Lane{lane}, plan_.manifest.seed));
    }
}

void Engine::take_history(const std::vector<StoredEvent>& history) {
    for (const StoredEvent& stored : history) {
        state_.apply(stored);
        const std::optional<Lane> lane = lane_of(stored.event);
        if (!lane) continue;
        const auto job = jobs_.find(number(*lane));
        if (job != jobs_.end()) job->second.unseen.push_back(stored.event);
    }
}

Task<void> Engine::append(std::vector<Event> events) {
    auto stored = co_await bench_.journal.append(plan_.manifest.run, std::move(events));
    if (!stored) {
        failed_ = true;
        co_return stored.error();
    }
    for (StoredEvent& event : *stored) {
        state_.apply(event);
        for (Observer* observer : bench_.observers) observer->on_event(event);
        if (const auto lane = lane_of(event.event)) {
            if (const auto job = jobs_.find(number(*lane)); job != jobs_.end()) {
                job->second.unseen.push_back(std::move(event.event));
            }
        }
    }
    co_return Result<void>{};
}

Task<void> Engine::append(Event event) {
    std::vector<Event> one;
    one.push_back(std::move(event));
    return append(std::move(one));
}

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

bool Engine::should_stop() const {
    if (bench_.stop.requested() || failed_) return true;
    return plan_.recipe.wall_limit_s > 0 &&
           bench_.time.now() - started_ > std::chrono::duration<double>(plan_.recipe.wall_limit_s);
}

// The lane's values as found. A reset meanwhile changes them, and nothing was written yet: again.
Task<SavedLane> Engine::save_lane(Lane lane) {
    Result<SavedLane> saved = Fault{};
    for (std::uint32_t attempt = 0; attempt < save_attempts; ++attempt) {
        saved = co_await bench_.reader.save(lane);
        if (saved || reaction_to(saved.error().cause) != Reaction::read_anew) break;
        co_await bench_.time.sleep_until(bench_.time.now() + pause_before(attempt), bench_.stop);
    }
    co_return saved;
}

// Every lane whose saved values are known goes into the note before the first write of the run.
// Codes that may not be written could not be restored either: such a lane is left alone.
Task<void> Engine::save_lanes() {
    const CodeSpace space = code_space_of(plan_.board);
    for (const auto& [number_of_lane, job] : jobs_) {
        const Lane lane{number_of_lane};
        if (!state_.lanes[number_of_lane].saved) {
            auto saved = co_await save_lane(lane);
            if (!saved) co_return saved.error();
            const bool allowed = space.allows(codes_of(*saved));
            std::vector<Event> events;
            events.push_back(LaneSaved{std::move(*saved)});
            if (!allowed) events.push_back(LaneFinished{lane, LaneOutcome::failed, not_restorable});
            auto storing = append(std::move(events));
            if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
        }
        const LaneState& known = state_.lanes[number_of_lane];
        if (!known.finished) plan_.note.set(resting(known));
    }
    co_return note_changed();
}

Task<bool> Engine::measure(Lane lane, DoMeasure what) {
    auto intending = append(Intent{lane, what.ordinal, what.attempt, what.stage, what.request});
    if (auto stored = co_await std::move(intending); !stored) co_return stored.error();
    auto taken = co_await bench_.reader.read(lane, what.request, what.ordinal);
    if (!taken) co_return co_await reading_failed(lane, std::move(what), taken.error());
    if (taken->reading.cost_s <= 0) {
        taken->reading.cost_s = cost_s(cost_model_of(plan_.board), what.request);
    }
    auto storing = append(ReadingTaken{lane, what.ordinal, what.attempt, std::move(taken->reading),
                                       std::move(taken->wire)});
    if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
    co_return true;
}

// After a reset every lane of the board holds its reset codes, those that had been settled too.
void Engine::board_was_reset() {
    const std::uint64_t resets = bench_.link_counts().resets;
    if (resets == resets_known_)
        return;  // another lane has told; lanes may be settled again by now
    resets_known_ = resets;
    bench_.say("the board has reset; lanes outside this run hold their reset codes now");
    bool changed = false;
    for (auto& [number_of_lane, lane] : state_.lanes) {
        if (!lane.saved || lane.moved) continue;
        lane.moved = true;
        plan_.note.set(resting(lane));
        changed = true;
    }
    if (!changed) return;
    if (auto noted = note_changed(); !noted) bench_.say(noted.error().text());
}

Task<bool> Engine::reading_failed(Lane lane, DoMeasure what, Fault fault) {
    if (fault.cause == Cause::stopped) co_return false;
    switch (reaction_to(fault.cause)) {
        case Reaction::end_run:
            co_return fault;
        case Reaction::fail_lane:
            co_return co_await fail_lane(lane, std::move(fault));
        case Reaction::read_anew:
            break;
    }
    if (fault.cause == Cause::board_reset) board_was_reset();
    auto storing = append(ReadingVoid{lane, what.ordinal, what.attempt, fault.text()});
    if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
    co_await bench_.time.sleep_until(bench_.time.now() + pause_before(what.attempt), bench_.stop);
    if (fault.cause == Cause::board_reset || fault.cause == Cause::outcome_unknown) {
        auto up = co_await bench_.reader.bring_up(lane);
        if (!up && reaction_to(up.error().cause) == Reaction::end_run) co_return up.error();
    }
    co_return true;
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
        if (last.cause == Cause::board_reset) board_was_reset();
        if (reaction_to(last.cause) != Reaction::read_anew) break;
        co_await bench_.time.sleep_until(bench_.time.now() + 20ms);
        auto up = co_await bench_.reader.bring_up(lane);
        if (!up) last = up.error();
    }
    co_return last;
}

Task<bool> Engine::carry_out(Lane lane, Action action) {
    if (std::holds_alternative<DoNothing>(action)) co_return false;
    if (auto* measuring = std::get_if<DoMeasure>(&action)) {
        co_return co_await measure(lane, std::move(*measuring));
    }
    if (auto* decide = std::get_if<DoDecide>(&action)) {
        auto storing = append(LaneDecided{lane, std::move(decide->decision)});
        if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
        // From here on an interrupted lane is to hold the decided codes, where they are to stay.
        plan_.note.set(resting(state_.lanes[number(lane)]));
        if (auto noted = note_changed(); !noted) co_return noted.error();
        co_return true;
    }
    if (const auto* settling = std::get_if<DoSettle>(&action)) {
        auto settled = co_await settle(lane, settling->settlement, settling->codes);
        if (settled) co_return true;
        const Fault fault = settled.error();
        if (reaction_to(fault.cause) == Reaction::end_run) co_return fault;
        // The codes stay in the restore note; the lane says so.
        Fault told = fault;
        told.hint = "The lane's codes are not where they belong; the next contact writes them";
        auto storing = append(LaneFinished{lane, LaneOutcome::failed, told.text()});
        if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
        co_return true;
    }
    if (auto* finish = std::get_if<DoFinish>(&action)) {
        auto storing = append(LaneFinished{lane, finish->outcome, std::move(finish->reason)});
        if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
        co_return true;
    }
    Fault fault;
    fault.cause = Cause::internal;
    fault.what = "a lane was to be measured before its codes were saved";
    fault.lane = lane;
    co_return fault;
}

// What the machine makes of the events stored since it was last asked; on a worker.
struct NextAction {
    Action action;
    std::string diverged;
};

NextAction next_action(LaneMachine& machine, const std::vector<Event>& events) {
    try {
        for (const Event& event : events) machine.apply(event);
        return {machine.next(), {}};
    } catch (const Diverged& divergence) {
        return {DoNothing{}, divergence.what()};
    }
}

Task<void> Engine::lane_task(Lane lane) {
    LaneJob& job = jobs_.at(number(lane));
    for (;;) {
        if (should_stop()) co_return Result<void>{};
        auto work = [&job, events = std::exchange(job.unseen, {})] {
            return next_action(*job.machine, events);
        };
        NextAction next = co_await compute(bench_.workers, std::move(work));
        if (!next.diverged.empty()) {
            Fault fault;
            fault.cause = Cause::diverged;
            fault.what =
                "the stored run would not repeat itself with this program: " + next.diverged;
            fault.hint = "Use the version that began it, or start anew with --new";
            failed_ = true;
            co_return fault;
        }
        auto more = co_await carry_out(lane, std::move(next.action));
        if (!more) {
            failed_ = true;
            co_return more.error();
        }
        if (!*more) co_return Result<void>{};
    }
}

Task<void> Engine::run_waves() {
    for (const auto& wave : plan_.manifest.waves) {
        TaskGroup group(bench_.time.io());
        for (const std::uint16_t lane : wave) {
            group.spawn("lane " + std::to_string(lane), lane_task(Lane{lane}));
        }
        if (auto joined = co_await group.join(); !joined) co_return joined.error();
        if (should_stop()) break;
    }
    co_return Result<void>{};
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

RunEnded Engine::ended(const Result<void>& outcome) const {
    RunEnded out;
    if (!outcome) {
        out.ending = Ending::fault;
        out.reason = outcome.error().text();
    } else if (state_.complete(plan_.manifest.lanes)) {
        out.ending = Ending::complete;
    } else if (bench_.stop.requested()) {
        out.ending = Ending::stopped;
        out.reason = "stopped by request";
    } else {
        out.ending = Ending::wall_limit;
        out.reason = "the recipe's wall limit was reached";
    }
    if (!unsettled_.empty()) out.reason += (out.reason.empty() ? "" : ". ") + unsettled_sentence();
    out.link = bench_.link_counts();
    out.wall_s = std::chrono::duration<double>(bench_.time.now() - started_).count();
    return out;
}

Task<RunEnded> Engine::run(std::vector<StoredEvent> history) {
    started_ = bench_.time.now();
    resets_known_ = bench_.link_counts().resets;
    make_jobs();
    take_history(history);
    Result<void> outcome = co_await save_lanes();
    if (outcome) outcome = co_await run_waves();
    auto rest = co_await settle_rest();
    if (outcome && !rest) outcome = rest.error();
    RunEnded end = ended(outcome);
    auto storing = append(end);
    auto stored = co_await std::move(storing);
    if (!stored) {
        Fault fault = stored.error();
        if (!outcome && outcome.error().cause != Cause::io) fault = outcome.error();
        add_unsettled(fault);
        co_return fault;
    }
    if (!outcome) {
        Fault fault = outcome.error();
        add_unsettled(fault);
        co_return fault;
    }
    co_return end;
}

}  // namespace

Task<RunEnded> run_board(RunPlan plan, std::vector<StoredEvent> history, Bench bench) {
    Engine engine(std::move(plan), std::move(bench));
    co_return co_await engine.run(std::move(history));
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
