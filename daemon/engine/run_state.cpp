#include "daemon/engine/run_state.hpp"

#include <algorithm>

namespace lanewright {

namespace {

template <class... F>
struct Overloaded : F... {
    using F::operator()...;
};

}  // namespace

Codes codes_of(const SavedLane& saved) {
    Codes codes;
    for (const SavedField& field : saved.fields) {
        if (field.role == Role::tuned) {
            codes.value.push_back(static_cast<std::int32_t>(field.value));
        }
    }
    return codes;
}

SavedLane with_codes(SavedLane saved, const Codes& codes) {
    std::size_t next = 0;
    for (SavedField& field : saved.fields) {
        if (field.role != Role::tuned || next >= codes.value.size()) continue;
        field.value = static_cast<std::uint32_t>(codes.value[next++]);
    }
    return saved;
}

std::optional<Codes> LaneState::former() const {
    if (!saved) return std::nullopt;
    return codes_of(*saved);
}

void RunState::apply(const StoredEvent& stored) {
    std::visit(Overloaded{
                   [&](const Identified& e) { identity = e.identity; },
                   [&](const LaneSaved& e) { lanes[number(e.saved.lane)].saved = e.saved; },
                   [&](const Intent& e) {
                       LaneState& lane = lanes[number(e.lane)];
                       lane.moved = true;
                       lane.settled.reset();
                       intents_[{number(e.lane), e.ordinal}] = {e.stage, e.request.why};
                   },
                   [&](const ReadingTaken& e) {
                       const auto& [stage, why] = intents_[{number(e.lane), e.ordinal}];
                       lanes[number(e.lane)].readings.push_back(
                           {e.ordinal, stage, why, e.reading, stored.at_ns});
                   },
                   [&](const ReadingVoid& e) { ++lanes[number(e.lane)].void_count; },
                   [&](const LaneDecided& e) { lanes[number(e.lane)].decision = e.decision; },
                   [&](const LaneSettled& e) {
                       LaneState& lane = lanes[number(e.lane)];
                       lane.moved = false;
                       lane.settled = e.settlement;
                   },
                   [&](const LaneFinished& e) { lanes[number(e.lane)].finished = e; },
                   [&](const RunResumed&) {
                       ended.reset();
                       ++resumptions;
                   },
                   [&](const RunEnded& e) {
                       ended = e;
                       wall_s += e.wall_s;
                       link.frames += e.link.frames;
                       link.bad_frames += e.link.bad_frames;
                       link.retries += e.link.retries;
                       link.reconnects += e.link.reconnects;
                       link.resets += e.link.resets;
                   },
                   [&](const CodesWritten& e) {
                       LaneState& lane = lanes[number(e.lane)];
                       lane.last_written = e.codes;
                       lane.moved = false;
                   },
               },
               stored.event);
}

bool RunState::complete(const std::vector<std::uint16_t>& run_lanes) const {
    return std::all_of(run_lanes.begin(), run_lanes.end(), [this](std::uint16_t lane) {
        const auto found = lanes.find(lane);
        return found != lanes.end() && found->second.finished.has_value();
    });
}

RunState fold(const std::vector<StoredEvent>& events) {
    RunState state;
    for (const StoredEvent& event : events) state.apply(event);
    return state;
}

}  // namespace lanewright
