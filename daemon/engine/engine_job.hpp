#pragma once
// Purpose:   one run while it goes on; the engine's inside, shared by its sources and by nothing
//            else: engine.cpp (lanes), engine_settle.cpp (what stands on the board at the end),
//            engine_preflight.cpp (whether the bench is fit to measure on).
// Ownership: owns plan and lanes' machines; refers to what the Bench refers to.
// Threads:   the io thread; a machine is asked on a worker, by one lane's task at a time.

#include <map>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "daemon/engine/engine.hpp"
#include "daemon/engine/lane_machine.hpp"

namespace lanewright {

// What a fault of one register transaction means for the lane and the run.
enum class Reaction { read_anew, fail_lane, end_run };
Reaction reaction_to(Cause cause);

// How long until a lane tries again after a void reading: a board that has just reset needs a
// moment, and one that keeps failing must not be hammered.
std::chrono::nanoseconds pause_before(std::uint32_t attempt);

class Engine {
  public:
    Engine(RunPlan plan, Bench bench) : plan_(std::move(plan)), bench_(std::move(bench)) {}

    Task<RunEnded> run(std::vector<StoredEvent> history);

  private:
    struct LaneJob {
        std::unique_ptr<LaneMachine> machine;
        std::vector<Event> unseen;  // stored, not yet told to the machine
        bool was_reset = false;     // to be brought up before anything else
    };
    enum class Until { preflight_item, end };  // how far a lane's task goes

    void make_jobs();
    void take_history(const std::vector<StoredEvent>& history);
    Task<SavedLane> save_lane(Lane lane);
    Task<void> save_lanes();
    Task<void> run_waves();
    Task<void> lane_task(Lane lane, Until until);
    Task<void> bring_up_after_reset(Lane lane);
    Task<bool> carry_out(Lane lane, Action action);
    Task<bool> measure(Lane lane, DoMeasure what);
    Task<bool> reading_failed(Lane lane, DoMeasure what, Fault fault);
    Task<bool> fail_lane(Lane lane, Fault fault);
    Task<void> settle(Lane lane, Settlement settlement, Codes codes);
    Task<bool> settle_as_asked(Lane lane, DoSettle what);
    Task<bool> give_up(Lane lane);
    Task<void> settle_rest();

    Task<void> preflight();
    Task<void> resume_items();
    Task<void> run_lanes(std::vector<Lane> lanes);
    Task<void> check_status();
    bool seen_right_at_open_codes(Lane lane) const;
    Task<std::vector<StatusItem>> read_status(Lane lane);
    Task<std::vector<StatusItem>> status_at_open_codes(Lane lane);
    Task<void> check_monitors();
    Task<void> check_monitors_at_open_codes();
    Task<void> measure_board();
    Task<bool> take_known();
    Task<std::optional<Lane>> lane_with_open_codes(std::vector<Lane> candidates);
    std::vector<Lane> partners_of(Lane lane) const;
    Task<void> compare_lanes(Lane one);
    Task<void> choose_noise();
    Task<void> run_items(std::vector<Lane> lanes, std::vector<std::string> items);
    std::vector<Lane> active_lanes() const;
    bool one_at_a_time() const;
    Result<void> failed_items() const;
    Task<void> append(std::vector<Event> events);
    Task<void> append(Event event);  // name its task before waiting for it: g++ 12.2 destroys
                                     // aggregate temporaries of a co_await expression twice
    Result<void> note_changed();
    bool keeps_decision(const LaneState& lane) const;
    SavedLane resting(const LaneState& lane) const;
    void board_was_reset(Lane told_by);
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

}  // namespace lanewright
