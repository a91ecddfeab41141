#pragma once
// Purpose:   what one lane's job does next: a pure fold over the lane's stored events. The strategy
//            is built anew and handed the stored readings; what it proposes must equal what is
//            stored, else the run has diverged.
// Ownership: owns its procedures and the code space they search.
// Threads:   one caller at a time; next() may compute for long (it lets the strategy propose).
// Errors:    Diverged, where a stored event is not what this program would have done.

#include <cstdint>
#include <memory>
#include <optional>
#include <stdexcept>
#include <string>
#include <variant>
#include <vector>

#include "adapt/search/procedure.hpp"
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
struct DoSettle {
    Settlement settlement = Settlement::decided;
    Codes codes;
};
struct DoFinish {
    LaneOutcome outcome = LaneOutcome::failed;
    std::string reason;
};
struct DoNothing {};
using Action = std::variant<DoSave, DoMeasure, DoDecide, DoSettle, DoFinish, DoNothing>;

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
    void start_search(const SavedLane& saved);
    void start_compare(const Decision& decision);
    const std::vector<Request>& batch();
    void check_intent(const Intent& intent);
    void take(const ReadingTaken& taken);

    LaneSetup setup_;
    Lane lane_{};
    std::optional<SavedLane> saved_;
    std::unique_ptr<Procedure> procedure_;
    Stage stage_ = Stage::search;
    std::optional<std::vector<Request>> batch_;  // proposed, not yet observed
    std::vector<Reading> got_;                   // of that batch
    std::uint32_t next_ordinal_ = 0, attempt_ = 0;
    std::optional<Decision> decision_;
    bool settled_ = false;
    bool finished_ = false;
    std::string last_void_;
};

}  // namespace lanewright
