#include "daemon/engine/lane_machine.hpp"

#include <algorithm>
#include <cmath>
#include <utility>

#include "daemon/engine/edge_statistics.hpp"
#include "daemon/engine/run_state.hpp"

namespace lanewright {

namespace {

template <class... F>
struct Overloaded : F... {
    using F::operator()...;
};

// Reference readings in a row that must differ after a reset before the run is stopped: one in
// twenty differs by chance.
constexpr std::uint32_t most_disagreeing = 3;

// Random numbers of a strategy and of nothing else (RandomKey::purpose).
constexpr std::uint32_t purpose_strategy = 1;

bool same_request(const Request& a, const Request& b) {
    return a.codes == b.codes && a.condition == b.condition && a.what == b.what &&
           a.wait_s == b.wait_s;
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
    return {std::move(dimensions), space.forbidden(), space.list()};
}

}  // namespace

LaneMachine::LaneMachine(LaneSetup setup) : setup_(std::move(setup)), lane_(setup_.problem.lane) {
    side_.next_ordinal = setup_.first_side_ordinal;
    declared_ = setup_.problem.noise;
}

void LaneMachine::diverged(const std::string& why) const {
    throw Diverged("lane " + std::to_string(number(lane_)) + why);
}

const std::vector<Request>& LaneMachine::Track::proposed(Procedure& procedure) {
    if (!batch) {
        batch = procedure.propose(Condition{0});
        got.clear();
    }
    return *batch;
}

void LaneMachine::Track::take(Procedure& procedure, const Reading& reading) {
    got.push_back(reading);
    ++next_ordinal;
    if (got.size() < batch->size()) return;
    procedure.observe(got);
    batch.reset();
}

void LaneMachine::start_search(const SavedLane& saved) {
    saved_ = saved;
    setup_.problem.present = codes_of(saved);
    setup_.space = held_at_present(setup_.space, setup_.tuned, setup_.problem.present);
    setup_.problem.space = &setup_.space;
    make_strategy();
}

void LaneMachine::make_strategy() {
    procedure_ =
        setup_.make(setup_.problem, {}, RandomKey{setup_.seed, number(lane_), purpose_strategy, 0});
}

void LaneMachine::start_compare(const Decision& decision) {
    if (stage_ != Stage::search || !procedure_ || procedure_->conclude().codes != decision.codes) {
        diverged(": the strategy would decide otherwise than stored");
    }
    decision_ = decision;
    stage_ = Stage::compare;
    main_.batch.reset();
    // Proof is needed at the required error ratio, whatever the search was content with.
    LaneProblem problem = setup_.problem;
    problem.reading.error_ratio = problem.required.error_ratio;
    procedure_ = make_fresh_comparison(problem, decision.codes, setup_.verify_rounds);
}

void LaneMachine::begin_items(const std::vector<std::string>& items) {
    if (!saved_) diverged(": its preflight is stored before its codes were saved");
    items_left_ = items;
    attempt_ = 0;
    reading_.reset();
    next_probe();
}

void LaneMachine::next_probe() {
    probe_.reset();
    side_.batch.reset();
    if (items_left_.empty()) return;
    probe_problem_ = setup_.problem;
    probe_problem_.noise = declared_;
    probe_ = make_probe(items_left_.front(), {&probe_problem_, setup_.preflight, items_});
    if (!probe_) diverged(": no preflight item is called \"" + items_left_.front() + "\"");
}

void LaneMachine::end_item(const PreflightItem& item) {
    if (!probe_ || items_left_.front() != item.name || !side_.proposed(*probe_).empty() ||
        probe_->item().result != item.result) {
        diverged(": its preflight would not conclude \"" + item.name + "\" as stored");
    }
    items_[item.name] = item;
    items_left_.erase(items_left_.begin());
    next_probe();
}

void LaneMachine::choose_noise(const MonitorNoise& noise) {
    if (!saved_ || stage_ != Stage::search || main_.next_ordinal > 0 || reading_ == Stage::search) {
        diverged(": its noise is stored after its search had begun");
    }
    setup_.problem.noise = noise;
    main_.batch.reset();
    make_strategy();
}

// Only while something is still to be measured that it could vouch for.
bool LaneMachine::reference_due() {
    if (!reference_ || main_.proposed(*procedure_).empty()) return false;
    if (reset_) return true;
    return stage_ == Stage::search && (since_reference_ >= setup_.reference_every ||
                                       since_reference_s_ >= setup_.reference_every_s);
}

Request LaneMachine::reference_request() const {
    Request request;
    request.codes = reference_->codes;
    request.what = setup_.problem.reading;
    request.why = reset_ ? "reference: after a reset" : "reference: read again";
    return request;
}

std::optional<DoMeasure> LaneMachine::due() {
    if (probe_) {
        const std::vector<Request>& proposed = side_.proposed(*probe_);
        if (proposed.empty()) return std::nullopt;
        return DoMeasure{side_.next_ordinal, attempt_, Stage::preflight,
                         proposed[side_.got.size()]};
    }
    if (reference_due()) {
        return DoMeasure{side_.next_ordinal, attempt_, Stage::reference, reference_request()};
    }
    const std::vector<Request>& proposed = main_.proposed(*procedure_);
    if (proposed.empty()) return std::nullopt;
    return DoMeasure{main_.next_ordinal, attempt_, stage_, proposed[main_.got.size()]};
}

void LaneMachine::check_intent(const Intent& intent) {
    const std::string at = ", reading " + std::to_string(intent.ordinal) + ": ";
    if (!procedure_) diverged(at + "it was stored before the lane's codes were saved");
    const std::optional<DoMeasure> expected = due();
    if (!expected || intent.stage != expected->stage) {
        diverged(at + "the strategy would not take another reading here");
    }
    if (intent.ordinal != expected->ordinal) {
        diverged(at + "reading " + std::to_string(expected->ordinal) + " was expected here");
    }
    if (!same_request(expected->request, intent.request)) {
        diverged(at + "the strategy would read other codes here than those stored");
    }
    attempt_ = intent.attempt;
    reading_ = intent.stage;
    settled_ = false;
}

// A reset leaves the codes and comes back to them: as far as the board file accepts that a return
// moves them, the lane still reads as before.
MonitorNoise LaneMachine::noise_over_reset() const {
    MonitorNoise noise = setup_.problem.noise;
    const PreflightLimits& limits = setup_.preflight.limits;
    noise.height_sigma_mv = std::hypot(std::max(noise.height_sigma_mv, declared_.height_sigma_mv),
                                       limits.return_mv.value_or(0));
    noise.width_sigma_ui = std::hypot(std::max(noise.width_sigma_ui, declared_.width_sigma_ui),
                                      limits.return_ui.value_or(0));
    return noise;
}

void LaneMachine::take_reference(const Reading& reading) {
    const Reading& before = reset_ ? *last_reference_ : *reference_;
    const MonitorNoise noise = reset_ ? noise_over_reset() : setup_.problem.noise;
    const auto shift = significant_shift(before, reading, noise, !setup_.preflight.counted);
    since_reference_ = 0;
    since_reference_s_ = 0;
    if (reset_ && shift) {
        ++disagreeing_;
        disagreement_ = text_of(*shift);
        return;
    }
    reset_ = false;
    disagreeing_ = 0;
    last_reference_ = reading;
}

void LaneMachine::take(const ReadingTaken& taken) {
    if (!reading_) diverged(": a reading is stored that nothing asked for");
    const Stage stage = *reading_;
    reading_.reset();
    attempt_ = 0;
    if (stage == Stage::preflight) return side_.take(*probe_, taken.reading);
    if (stage == Stage::reference) {
        ++side_.next_ordinal;
        return take_reference(taken.reading);
    }
    if (stage == Stage::search) {
        ++since_reference_;
        since_reference_s_ += taken.reading.cost_s;
        if (!reference_ && taken.reading.status == Status::open) {
            reference_ = last_reference_ = taken.reading;
            since_reference_ = 0;
            since_reference_s_ = 0;
        }
    }
    main_.take(*procedure_, taken.reading);
}

void LaneMachine::take_void(const ReadingVoid& voided) {
    attempt_ = voided.attempt + 1;
    last_void_ = voided.cause;
    reading_.reset();
    if (voided.changed_register.empty()) return;
    ++codes_changed_;
    changed_register_ = voided.changed_register;
}

void LaneMachine::apply(const Event& event) {
    std::visit(Overloaded{
                   [&](const LaneSaved& e) { start_search(e.saved); },
                   [&](const Intent& e) { check_intent(e); },
                   [&](const ReadingTaken& e) { take(e); },
                   [&](const ReadingVoid& e) { take_void(e); },
                   [&](const LaneDecided& e) { start_compare(e.decision); },
                   [&](const LaneSettled&) { settled_ = true; },
                   [&](const LaneFinished&) { finished_ = true; },
                   [&](const PreflightBegun& e) { begin_items(e.items); },
                   [&](const PreflightItem& e) { end_item(e); },
                   [&](const NoiseChosen& e) { choose_noise(e.noise); },
                   [&](const LaneReset&) { reset_ = reference_.has_value(); },
                   [&](const RunResumed&) { disagreeing_ = 0; },
                   [](const auto&) {},
               },
               event);
}

// What ends the lane before its time.
std::optional<Action> LaneMachine::ending() {
    if (codes_changed_ >= most_codes_changed) {
        if (!settled_) return DoSettle{Settlement::given_up, setup_.problem.present};
        return DoFinish{LaneOutcome::failed,
                        "something else writes " + changed_register_ +
                            ": the codes changed without us again after they had been written "
                            "anew. Nothing more is written to this lane, its former codes "
                            "neither; find what else writes there"};
    }
    if (attempt_ < setup_.most_attempts) return std::nullopt;
    if (!settled_) return DoSettle{Settlement::restored, setup_.problem.present};
    return DoFinish{LaneOutcome::failed,
                    "reading " + std::to_string(probe_ ? side_.next_ordinal : main_.next_ordinal) +
                        " came to nothing " + std::to_string(attempt_) +
                        " times, last: " + last_void_};
}

Action LaneMachine::next() {
    if (finished_) return DoNothing{};
    if (!saved_) return DoSave{};
    if (std::optional<Action> end = ending()) return std::move(*end);
    if (disagreeing_ >= most_disagreeing) {
        return DoStopRun{"after a reset the reference code does not read as before: " +
                         disagreement_};
    }
    if (std::optional<DoMeasure> measure = due()) return std::move(*measure);
    if (probe_) return DoConcludeItem{probe_->item()};
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
    return main_.proposed(*procedure_);
}

std::string LaneMachine::phase() const {
    if (finished_) return "done";
    if (probe_) return "preflight";
    if (stage_ == Stage::compare) return "before/after";
    return procedure_ ? std::string(procedure_->phase()) : "save";
}

}  // namespace lanewright
