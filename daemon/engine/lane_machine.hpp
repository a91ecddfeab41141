#pragma once
// Purpose:   what one lane's job does next: a pure fold over the lane's stored events. The strategy
//            is built anew and handed the stored readings; what it proposes must equal what is
//            stored, else the run has diverged. Beside the strategy's readings, and unknown to it,
//            the lane takes those of the preflight and looks at its reference code again and again.
// Ownership: owns its procedures and the code space they search.
// Threads:   one caller at a time; next() may compute for long (it lets the strategy propose).
// Errors:    Diverged, where a stored event is not what this program would have done.

#include <cstdint>
#include <map>
#include <memory>
#include <optional>
#include <stdexcept>
#include <string>
#include <variant>
#include <vector>

#include "adapt/search/procedure.hpp"
#include "daemon/engine/preflight_probe.hpp"
#include "daemon/store/events.hpp"

namespace lanewright {

class Diverged : public std::runtime_error {
  public:
    using std::runtime_error::runtime_error;
};

struct LaneSetup {
    LaneProblem problem;      // `space` and `present` are filled in once the codes are saved
    CodeSpace space;          // all the board's dimensions
    std::vector<bool> tuned;  // those the recipe moves; the others stay as found
    MakeProcedure make = nullptr;
    std::uint64_t seed = 0;
    std::uint32_t verify_rounds = 1;
    bool leave = true;                // leave the decided codes, or restore the former
    std::uint32_t most_attempts = 6;  // of one reading, before the lane fails
    PreflightSetup preflight;
    // Readings outside the strategy's are numbered from here on, so that a check more or less
    // leaves the numbers of the others as they are.
    std::uint32_t first_side_ordinal = 0x80000000u;
    // The reference code is read again after so many readings, or so much charged bench time.
    std::uint32_t reference_every = 20;
    double reference_every_s = 600;
};

// What to do next.
struct DoSave {};
struct DoMeasure {
    std::uint32_t ordinal = 0, attempt = 0;
    Stage stage = Stage::search;
    Request request;
};
struct DoDecide {
    Decision decision;
};
struct DoConcludeItem {  // the measured item of the preflight that is through
    PreflightItem item;
};
struct DoSettle {
    Settlement settlement = Settlement::decided;
    Codes codes;
};
struct DoFinish {
    LaneOutcome outcome = LaneOutcome::failed;
    std::string reason;
};
struct DoStopRun {  // the lane no longer reads as it did: nothing that follows would mean anything
    std::string reason;
};
struct DoNothing {};
using Action = std::variant<DoSave, DoMeasure, DoDecide, DoSettle, DoFinish, DoNothing,
                            DoConcludeItem, DoStopRun>;

class LaneMachine {
  public:
    explicit LaneMachine(LaneSetup setup);
    LaneMachine(const LaneMachine&) = delete;  // the problem points at its own code space
    LaneMachine& operator=(const LaneMachine&) = delete;

    void apply(const Event& event);
    Action next();

    // What a lane found like that would be asked first; for a dry run.
    std::vector<Request> first_batch(const SavedLane& saved);

    // For progress lines: "scan", "descent", ..., "before/after".
    std::string phase() const;

  private:
    // What one procedure has asked for and got.
    struct Track {
        std::optional<std::vector<Request>> batch;  // proposed, not yet observed
        std::vector<Reading> got;                   // of that batch
        std::uint32_t next_ordinal = 0;
        const std::vector<Request>& proposed(Procedure& procedure);
        void take(Procedure& procedure, const Reading& reading);
    };

    void start_search(const SavedLane& saved);
    void make_strategy();
    void start_compare(const Decision& decision);
    void begin_items(const std::vector<std::string>& items);
    void next_probe();
    void end_item(const PreflightItem& item);
    void choose_noise(const MonitorNoise& noise);
    bool reference_due();
    Request reference_request() const;
    std::optional<DoMeasure> due();
    std::optional<Action> ending();
    void check_intent(const Intent& intent);
    void take(const ReadingTaken& taken);
    void take_void(const ReadingVoid& voided);
    MonitorNoise noise_over_reset() const;
    void take_reference(const Reading& reading);
    [[noreturn]] void diverged(const std::string& why) const;

    LaneSetup setup_;
    Lane lane_{};
    std::optional<SavedLane> saved_;
    std::unique_ptr<Procedure> procedure_;  // the strategy, later the comparison
    Stage stage_ = Stage::search;
    Track main_, side_;
    std::optional<Stage> reading_;  // the stage of the reading whose intent is stored
    std::uint32_t attempt_ = 0;

    std::vector<std::string> items_left_;  // of the preflight; the first is being measured
    LaneProblem probe_problem_;            // the lane's, with the declared noise
    MonitorNoise declared_;
    std::unique_ptr<Probe> probe_;
    std::map<std::string, PreflightItem> items_;  // concluded, by name

    std::optional<Reading> reference_, last_reference_;  // first and latest reading of that code
    std::uint32_t since_reference_ = 0;
    double since_reference_s_ = 0;
    bool reset_ = false;             // since the reference was last found to read as before
    std::uint32_t disagreeing_ = 0;  // reference readings in a row since the reset
    std::string disagreement_;

    std::optional<Decision> decision_;
    std::uint32_t codes_changed_ = 0;
    std::string changed_register_;
    bool settled_ = false;
    bool finished_ = false;
    std::string last_void_;
};

}  // namespace lanewright
