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
                       lane.searched = lane.searched || e.stage == Stage::search;
                       intents_[{number(e.lane), e.ordinal}] = {e.stage, e.request.why};
                   },
                   [&](const ReadingTaken& e) {
                       const auto& [stage, why] = intents_[{number(e.lane), e.ordinal}];
                       lanes[number(e.lane)].readings.push_back(
                           {e.ordinal, stage, why, e.reading, stored.at_ns});
                   },
                   [&](const ReadingVoid& e) {
                       LaneState& lane = lanes[number(e.lane)];
                       ++lane.void_count;
                       if (!e.changed_register.empty()) ++lane.codes_changed;
                   },
                   [&](const LaneDecided& e) { lanes[number(e.lane)].decision = e.decision; },
                   [&](const LaneSettled& e) {
                       LaneState& lane = lanes[number(e.lane)];
                       lane.moved = false;
                       lane.settled = e.settlement;
                   },
                   [&](const LaneFinished& e) { lanes[number(e.lane)].finished = e; },
                   [&](const RunResumed& e) {
                       ended.reset();
                       resumed_by = e.pid;
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
                   [&](const PreflightBegun& e) { lanes[number(e.lane)].items_left = e.items; },
                   [&](const PreflightItem& e) { take_item(e); },
                   [&](const NoiseChosen& e) { lanes[number(e.lane)].noise = e; },
                   [&](const LaneReset& e) { ++lanes[number(e.lane)].reset_count; },
               },
               stored.event);
}

void RunState::take_item(const PreflightItem& item) {
    if (item.lane) std::erase(lanes[number(*item.lane)].items_left, item.name);
    std::erase_if(preflight, [&](const PreflightItem& each) {
        return each.name == item.name && each.lane == item.lane;
    });
    preflight.push_back(item);
}

const PreflightItem* RunState::item(const std::string& name, std::optional<Lane> lane) const {
    const auto found = std::find_if(
        preflight.begin(), preflight.end(),
        [&](const PreflightItem& each) { return each.name == name && each.lane == lane; });
    return found == preflight.end() ? nullptr : &*found;
}

const PreflightItem* RunState::measured_item(const std::string& name) const {
    const auto found =
        std::find_if(preflight.rbegin(), preflight.rend(), [&](const PreflightItem& each) {
            return each.name == name && each.result != ItemResult::not_shown;
        });
    return found == preflight.rend() ? nullptr : &*found;
}

std::vector<ReferenceReading> reference_readings(const LaneState& lane,
                                                 const MonitorNoise& declared, bool latched) {
    const MonitorNoise& noise = lane.noise ? lane.noise->noise : declared;
    std::vector<ReferenceReading> out;
    const Reading* first = nullptr;
    std::uint32_t searched = 0;
    for (const LaneReadingRecord& record : lane.readings) {
        if (record.stage == Stage::search) {
            ++searched;
            if (first == nullptr && record.reading.status == Status::open) first = &record.reading;
        }
        if (record.stage != Stage::reference || first == nullptr) continue;
        out.push_back(
            {searched, record.at_ns, significant_shift(*first, record.reading, noise, latched)});
    }
    return out;
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
