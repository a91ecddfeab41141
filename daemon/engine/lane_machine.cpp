#include "daemon/engine/lane_machine.hpp"

#include <utility>

#include "daemon/engine/run_state.hpp"

namespace lanewright {

namespace {

template <class... F>
struct Overloaded : F... {
    using F::operator()...;
};

// Random numbers of a strategy and of nothing else (RandomKey::purpose).
constexpr std::uint32_t purpose_strategy = 1;

bool same_request(const Request& a, const Request& b) {
    return a.codes == b.codes && a.condition == b.condition && a.what == b.what;
}

// The space with every dimension that is not tuned held at its present code.
CodeSpace held_at_present(const CodeSpace& space, const std::vector<bool>& tuned,
                          const Codes& present) {
    std::vector<Dimension> dimensions = space.dimensions();
    for (std::size_t i = 0; i < dimensions.size() && i < present.value.size(); ++i) {
        if (i < tuned.size() && tuned[i]) continue;
        const std::optional<double> nominal = space.nominal(i, present.value[i]);
        dimensions[i].lowest = dimensions[i].highest = present.value[i];
        dimensions[i].nominal.clear();
        if (nominal) dimensions[i].nominal.push_back(*nominal);
    }
    return {std::move(dimensions), space.forbidden()};
}

}  // namespace

LaneMachine::LaneMachine(LaneSetup setup) : setup_(std::move(setup)), lane_(setup_.problem.lane) {}

void LaneMachine::start_search(const SavedLane& saved) {
    saved_ = saved;
    setup_.problem.present = codes_of(saved);
    setup_.space = held_at_present(setup_.space, setup_.tuned, setup_.problem.present);
    setup_.problem.space = &setup_.space;
    procedure_ =
        setup_.make(setup_.problem, {}, RandomKey{setup_.seed, number(lane_), purpose_strategy, 0});
}

void LaneMachine::start_compare(const Decision& decision) {
    decision_ = decision;
    stage_ = Stage::compare;
    batch_.reset();
    // Proof is needed at the required error ratio, whatever the search was content with.
    LaneProblem problem = setup_.problem;
    problem.reading.error_ratio = problem.required.error_ratio;
    procedure_ = make_fresh_comparison(problem, decision.codes, setup_.verify_rounds);
}

const std::vector<Request>& LaneMachine::batch() {
    if (!batch_) {
        batch_ = procedure_->propose(Condition{0});
        got_.clear();
    }
    return *batch_;
}

void LaneMachine::check_intent(const Intent& intent) {
    const auto diverged = [&](const std::string& why) {
        throw Diverged("lane " + std::to_string(number(lane_)) + ", reading " +
                       std::to_string(intent.ordinal) + ": " + why);
    };
    if (!procedure_) diverged("it was stored before the lane's codes were saved");
    if (intent.ordinal != next_ordinal_) {
        diverged("reading " + std::to_string(next_ordinal_) + " was expected here");
    }
    const std::vector<Request>& proposed = batch();
    if (proposed.empty() || intent.stage != stage_) {
        diverged("the strategy would not take another reading here");
    }
    if (!same_request(proposed[got_.size()], intent.request)) {
        diverged("the strategy would read other codes here than those stored");
    }
    attempt_ = intent.attempt;
}

void LaneMachine::take(const ReadingTaken& taken) {
    if (!batch_ || batch_->empty()) {
        throw Diverged("lane " + std::to_string(number(lane_)) +
                       ": a reading is stored that nothing asked for");
    }
    got_.push_back(taken.reading);
    ++next_ordinal_;
    attempt_ = 0;
    if (got_.size() < batch_->size()) return;
    procedure_->observe(got_);
    batch_.reset();
}

void LaneMachine::apply(const Event& event) {
    std::visit(Overloaded{
                   [&](const LaneSaved& e) { start_search(e.saved); },
                   [&](const Intent& e) {
                       check_intent(e);
                       settled_ = false;
                   },
                   [&](const ReadingTaken& e) { take(e); },
                   [&](const ReadingVoid& e) {
                       attempt_ = e.attempt + 1;
                       last_void_ = e.cause;
                   },
                   [&](const LaneDecided& e) {
                       if (stage_ != Stage::search || !procedure_ ||
                           procedure_->conclude().codes != e.decision.codes) {
                           throw Diverged("lane " + std::to_string(number(lane_)) +
                                          ": the strategy would decide otherwise than stored");
                       }
                       start_compare(e.decision);
                   },
                   [&](const LaneSettled&) { settled_ = true; },
                   [&](const LaneFinished&) { finished_ = true; },
                   [](const auto&) {},
               },
               event);
}

Action LaneMachine::next() {
    if (finished_) return DoNothing{};
    if (!saved_) return DoSave{};
    if (attempt_ >= setup_.most_attempts) {
        if (!settled_) return DoSettle{Settlement::restored, setup_.problem.present};
        return DoFinish{LaneOutcome::failed, "reading " + std::to_string(next_ordinal_) +
                                                 " came to nothing " + std::to_string(attempt_) +
                                                 " times, last: " + last_void_};
    }
    if (const std::vector<Request>& proposed = batch(); !proposed.empty()) {
        return DoMeasure{next_ordinal_, attempt_, stage_, proposed[got_.size()]};
    }
    if (stage_ == Stage::search) return DoDecide{procedure_->conclude()};
    if (!settled_) {
        return setup_.leave ? DoSettle{Settlement::decided, decision_->codes}
                            : DoSettle{Settlement::restored, setup_.problem.present};
    }
    return DoFinish{decision_->unchanged ? LaneOutcome::unchanged : LaneOutcome::tuned,
                    decision_->reason};
}

std::vector<Request> LaneMachine::first_batch(const SavedLane& saved) {
    start_search(saved);
    return batch();
}

std::string LaneMachine::phase() const {
    if (finished_) return "done";
    if (stage_ == Stage::compare) return "before/after";
    return procedure_ ? std::string(procedure_->phase()) : "save";
}

}  // namespace lanewright
