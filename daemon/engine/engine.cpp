#include "daemon/engine/engine.hpp"

#include <algorithm>
#include <utility>

#include "daemon/engine/engine_job.hpp"
#include "drivers/io/task_group.hpp"

namespace lanewright {

namespace {

using namespace std::chrono_literals;

constexpr std::uint32_t save_attempts = 6;
constexpr const char* not_restorable =
    "the codes on the chip lie outside the board file's limits or are forbidden, so that they "
    "could "
    "not be restored; nothing was written. Set allowed codes first, or correct the board file";

}  // namespace

Reaction reaction_to(Cause cause) {
    switch (cause) {
        case Cause::board_reset:
        case Cause::outcome_unknown:
        case Cause::not_accepted:
        case Cause::codes_changed:
        case Cause::wait_expired:
            return Reaction::read_anew;
        case Cause::refused:
        case Cause::not_allowed:
            return Reaction::fail_lane;
        default:
            return Reaction::end_run;
    }
}

std::chrono::nanoseconds pause_before(std::uint32_t attempt) {
    return std::min<std::chrono::nanoseconds>(5ms * (1 << std::min(attempt, 8u)), 1s);
}

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
        if (std::holds_alternative<RunResumed>(stored.event)) {
            for (auto& [number_of_lane, job] : jobs_) job.unseen.push_back(stored.event);
        }
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
    if (fault.cause == Cause::board_reset) board_was_reset(lane);
    ReadingVoid voided{lane, what.ordinal, what.attempt, fault.text(), {}};
    if (fault.cause == Cause::codes_changed) {
        voided.changed_register = fault.reg.empty() ? "the codes" : fault.reg;
        bench_.say("lane " + std::to_string(number(lane)) + ": " + fault.text());
    }
    auto storing = append(std::move(voided));
    if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
    if (state_.lanes[number(lane)].codes_changed >= most_codes_changed) {
        co_return co_await give_up(lane);
    }
    co_await bench_.time.sleep_until(bench_.time.now() + pause_before(what.attempt), bench_.stop);
    if (fault.cause == Cause::outcome_unknown) {
        auto up = co_await bench_.reader.bring_up(lane);
        if (!up && reaction_to(up.error().cause) == Reaction::end_run) co_return up.error();
    }
    co_return true;
}

// The lane's codes are gone and its reference is to vouch for what follows.
Task<void> Engine::bring_up_after_reset(Lane lane) {
    jobs_.at(number(lane)).was_reset = false;
    auto up = co_await bench_.reader.bring_up(lane);
    if (!up && reaction_to(up.error().cause) == Reaction::end_run) co_return up.error();
    auto storing = append(LaneReset{lane});
    co_return co_await std::move(storing);
}

Task<bool> Engine::settle_as_asked(Lane lane, DoSettle what) {
    if (what.settlement == Settlement::given_up) co_return co_await give_up(lane);
    auto settled = co_await settle(lane, what.settlement, what.codes);
    if (settled) co_return true;
    Fault fault = settled.error();
    if (reaction_to(fault.cause) == Reaction::end_run) co_return fault;
    // The codes stay in the restore note; the lane says so.
    fault.hint = "The lane's codes are not where they belong; the next contact writes them";
    auto storing = append(LaneFinished{lane, LaneOutcome::failed, fault.text()});
    if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
    co_return true;
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
    if (auto* settling = std::get_if<DoSettle>(&action)) {
        co_return co_await settle_as_asked(lane, std::move(*settling));
    }
    if (auto* concluded = std::get_if<DoConcludeItem>(&action)) {
        auto storing = append(std::move(concluded->item));
        if (auto stored = co_await std::move(storing); !stored) co_return stored.error();
        co_return true;
    }
    if (auto* stopping = std::get_if<DoStopRun>(&action)) {
        Fault fault;
        fault.cause = Cause::not_fit;
        fault.what = std::move(stopping->reason);
        fault.board = plan_.board.name;
        fault.lane = lane;
        fault.hint =
            "Nothing that is read now can be compared with what was read before. Find "
            "out what else the reset changed; the same command then goes on";
        co_return fault;
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

namespace {

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

// Whether the preflight asks for that, or an end that its readings bring about.
bool belongs_to_preflight(const Action& action) {
    if (const auto* measure = std::get_if<DoMeasure>(&action)) {
        return measure->stage == Stage::preflight;
    }
    return std::holds_alternative<DoConcludeItem>(action) ||
           std::holds_alternative<DoSettle>(action) || std::holds_alternative<DoFinish>(action);
}

}  // namespace

Task<void> Engine::lane_task(Lane lane, Until until) {
    LaneJob& job = jobs_.at(number(lane));
    for (;;) {
        if (should_stop()) co_return Result<void>{};
        if (job.was_reset) {
            auto up = co_await bring_up_after_reset(lane);
            if (!up) {
                failed_ = true;
                co_return up.error();
            }
            continue;
        }
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
        if (until == Until::preflight_item && !belongs_to_preflight(next.action)) {
            co_return Result<void>{};
        }
        auto more = co_await carry_out(lane, std::move(next.action));
        if (!more) {
            failed_ = true;
            co_return more.error();
        }
        if (!*more) co_return Result<void>{};
    }
}

// Lanes of a wave run beside each other, unless the preflight saw that they disturb each other.
Task<void> Engine::run_waves() {
    for (const auto& wave : plan_.manifest.waves) {
        TaskGroup group(bench_.time.io());
        for (const std::uint16_t lane : wave) {
            group.spawn("lane " + std::to_string(lane), lane_task(Lane{lane}, Until::end));
            if (!one_at_a_time()) continue;
            if (auto joined = co_await group.join(); !joined) co_return joined.error();
        }
        if (auto joined = co_await group.join(); !joined) co_return joined.error();
        if (should_stop()) break;
    }
    co_return Result<void>{};
}

RunEnded Engine::ended(const Result<void>& outcome) const {
    RunEnded out;
    if (!outcome) {
        out.ending = Ending::fault;
        out.reason = outcome.error().text();
    } else if (state_.complete(plan_.manifest.lanes) || (plan_.only_preflight && !should_stop())) {
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
    if (outcome && plan_.preflight) outcome = co_await preflight();
    if (outcome && !plan_.only_preflight && !should_stop()) outcome = co_await run_waves();
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

Task<RunEnded> run_board(RunPlan plan, std::vector<StoredEvent> history, Bench bench) {
    Engine engine(std::move(plan), std::move(bench));
    co_return co_await engine.run(std::move(history));
}

}  // namespace lanewright
