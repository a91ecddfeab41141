// Is the bench fit to measure on? Status registers and monitors before every search; what holds
// for the board and its condition once, and from then on out of the store.

#include <algorithm>
#include <utility>

#include "daemon/engine/engine_job.hpp"
#include "daemon/engine/preflight.hpp"
#include "drivers/io/task_group.hpp"

namespace lanewright {

namespace {

constexpr std::uint32_t status_attempts = 6;

}  // namespace

std::vector<Lane> Engine::active_lanes() const {
    std::vector<Lane> out;
    for (const std::uint16_t lane : plan_.manifest.lanes) {
        const auto found = state_.lanes.find(lane);
        if (found != state_.lanes.end() && found->second.saved && !found->second.finished) {
            out.push_back(Lane{lane});
        }
    }
    return out;
}

bool Engine::one_at_a_time() const {
    const PreflightItem* parallel = state_.measured_item(item::parallel);
    return parallel != nullptr && parallel->result == ItemResult::noted;
}

// Of this start of the program: what an earlier one found wrong is looked at again.
Result<void> Engine::failed_items() const {
    std::vector<PreflightItem> failed;
    for (const PreflightItem& item : state_.preflight) {
        if (item.result != ItemResult::failed) continue;
        // Of two lanes read at once this is a finding about the pair: see compare_lanes.
        if (item.name != item::together) failed.push_back(item);
    }
    if (failed.empty() || plan_.only_preflight) return {};
    return fault_of_items(failed, plan_.board.name);
}

// What an interrupted start had begun goes on where it was, as everything else does. Only two lanes
// that are read at the same time begin again: what was left of the one would be read alone.
Task<void> Engine::resume_items() {
    std::vector<Event> dropped;
    std::vector<Lane> going_on;
    for (const Lane lane : active_lanes()) {
        const std::vector<std::string>& left = state_.lanes[number(lane)].items_left;
        if (left.empty()) continue;
        if (left.front() == item::together) {
            dropped.push_back(PreflightBegun{lane, {}});
        } else {
            going_on.push_back(lane);
        }
    }
    if (!dropped.empty()) {
        auto stored = co_await append(std::move(dropped));
        if (!stored) co_return stored.error();
    }
    co_return co_await run_lanes(std::move(going_on));
}

Task<void> Engine::run_lanes(std::vector<Lane> lanes) {
    TaskGroup group(bench_.time.io());
    for (const Lane lane : lanes) {
        group.spawn("preflight of lane " + std::to_string(number(lane)),
                    lane_task(lane, Until::preflight_item));
    }
    co_return co_await group.join();
}

Task<void> Engine::run_items(std::vector<Lane> lanes, std::vector<std::string> items) {
    std::vector<Event> events;
    for (const Lane lane : lanes) events.push_back(PreflightBegun{lane, items});
    auto stored = co_await append(std::move(events));
    if (!stored) co_return stored.error();
    co_return co_await run_lanes(std::move(lanes));
}

Task<std::vector<StatusItem>> Engine::read_status(Lane lane) {
    Result<std::vector<StatusItem>> items = Fault{};
    for (std::uint32_t attempt = 0; attempt < status_attempts; ++attempt) {
        items = co_await bench_.reader.status(lane);
        if (items || reaction_to(items.error().cause) != Reaction::read_anew) break;
        if (items.error().cause == Cause::board_reset) board_was_reset(lane);
        co_await bench_.time.sleep_until(bench_.time.now() + pause_before(attempt), bench_.stop);
    }
    co_return items;
}

bool Engine::seen_right_at_open_codes(Lane lane) const {
    const PreflightItem* open = state_.item(item::open_codes, lane);
    if (open == nullptr || open->result != ItemResult::passed) return false;
    return std::all_of(plan_.board.preflight.items.begin(), plan_.board.preflight.items.end(),
                       [this](const StatusExpectation& each) {
                           const PreflightItem* known = state_.item(each.name);
                           return known != nullptr && known->result == ItemResult::passed;
                       });
}

// A reset between finding the codes and looking takes them away: once more from the beginning.
Task<std::vector<StatusItem>> Engine::status_at_open_codes(Lane lane) {
    Result<std::vector<StatusItem>> items = Fault{};
    for (std::uint32_t attempt = 0; attempt < status_attempts; ++attempt) {
        const std::uint64_t resets = bench_.link_counts().resets;
        auto looking = run_items({lane}, {item::open_codes});
        auto looked = co_await std::move(looking);
        if (!looked) co_return looked.error();
        items = co_await read_status(lane);
        if (!items || bench_.link_counts().resets == resets || should_stop()) break;
    }
    co_return items;
}

// With the codes as found; where these may be to blame, again with codes that open the eye.
Task<void> Engine::check_status() {
    if (plan_.board.preflight.items.empty()) co_return Result<void>{};
    std::vector<LaneStatus> all;
    for (const Lane lane : active_lanes()) {
        auto items = co_await read_status(lane);
        if (!items) co_return items.error();
        LaneStatus status{lane, std::move(*items)};
        if (codes_may_mend(status)) {
            // An earlier start has seen it right at open codes; these do not stand any more.
            if (seen_right_at_open_codes(lane)) continue;
            auto again = co_await status_at_open_codes(lane);
            if (!again) co_return again.error();
            status.items = std::move(*again);
        }
        all.push_back(std::move(status));
    }
    std::vector<Event> events;
    for (PreflightItem& item : status_items(plan_.board, all)) events.push_back(std::move(item));
    co_return co_await append(std::move(events));
}

Task<void> Engine::check_monitors() {
    std::vector<Lane> lanes;
    for (const Lane lane : active_lanes()) {
        const PreflightItem* known = state_.item(item::monitor, lane);
        if (known == nullptr || known->result == ItemResult::failed) lanes.push_back(lane);
    }
    if (lanes.empty()) co_return Result<void>{};
    std::vector<std::string> items{item::monitor};
    co_return co_await run_items(std::move(lanes), std::move(items));
}

// A closed eye shows nothing of its monitor: once more where codes that open it were found since.
Task<void> Engine::check_monitors_at_open_codes() {
    std::vector<Lane> lanes;
    for (const Lane lane : active_lanes()) {
        const PreflightItem* known = state_.item(item::monitor, lane);
        const PreflightItem* open = state_.item(item::open_codes, lane);
        if (known == nullptr || known->result != ItemResult::not_shown) continue;
        if (open == nullptr || open->result != ItemResult::passed) continue;
        if (known->codes != open->codes) lanes.push_back(lane);
    }
    if (lanes.empty()) co_return Result<void>{};
    std::vector<std::string> items{item::monitor};
    co_return co_await run_items(std::move(lanes), std::move(items));
}

// True where earlier runs, or an earlier start of this one, have measured all of it.
Task<bool> Engine::take_known() {
    std::vector<Event> events;
    std::size_t known = 0;
    for (const std::string& name : board_items()) {
        const PreflightItem* here = state_.measured_item(name);
        if (here != nullptr && here->result != ItemResult::failed) {
            ++known;
            continue;
        }
        for (const PreflightItem& earlier : plan_.known) {
            if (earlier.name != name) continue;
            ++known;
            PreflightItem copy = earlier;
            copy.lane.reset();  // it was measured there, and holds for the board
            events.push_back(std::move(copy));
        }
    }
    if (!events.empty()) {
        auto stored = co_await append(std::move(events));
        if (!stored) co_return stored.error();
    }
    co_return known == board_items().size();
}

// The first of the candidates that shows an open eye with the present or with other codes.
Task<std::optional<Lane>> Engine::lane_with_open_codes(std::vector<Lane> candidates) {
    for (const Lane lane : candidates) {
        if (should_stop()) break;
        const PreflightItem* known = state_.item(item::open_codes, lane);
        if (known == nullptr) {
            auto looking = run_items({lane}, {item::open_codes});
            auto looked = co_await std::move(looking);
            if (!looked) co_return looked.error();
            known = state_.item(item::open_codes, lane);
        }
        if (known != nullptr && known->result == ItemResult::passed) {
            co_return std::optional<Lane>(lane);
        }
    }
    co_return std::optional<Lane>{};
}

Task<void> Engine::measure_board() {
    auto all_known = co_await take_known();
    if (!all_known) co_return all_known.error();
    if (*all_known) co_return Result<void>{};
    const std::vector<Lane> lanes = active_lanes();
    const bool pairs = std::any_of(lanes.begin(), lanes.end(),
                                   [this](Lane each) { return !partners_of(each).empty(); });
    const bool pair_known = state_.measured_item(item::parallel) != nullptr;
    std::vector<std::string> missing;
    for (const std::string& name : board_items()) {
        const PreflightItem* known = state_.measured_item(name);
        const bool wanted = known == nullptr || known->result == ItemResult::failed;
        if (wanted && name != item::parallel) missing.push_back(name);
    }
    if (missing.empty() && (pair_known || !pairs)) co_return Result<void>{};
    auto lane = co_await lane_with_open_codes(lanes);
    if (!lane) co_return lane.error();
    if (!*lane || should_stop()) co_return Result<void>{};
    // The others compare with the repeatability of their own lane and hour.
    if (!missing.empty()) {
        std::vector<std::string> items{item::repeatability, item::return_error, item::settle_time};
        auto measuring = run_items({**lane}, std::move(items));
        auto measured = co_await std::move(measuring);
        if (!measured) co_return measured.error();
    }
    if (pair_known) co_return Result<void>{};
    co_return co_await compare_lanes(**lane);
}

// The lanes beside which a lane's monitor can run: those that do not wait for the same one.
std::vector<Lane> Engine::partners_of(Lane lane) const {
    const auto& groups = plan_.board.monitor.shared_by;
    const auto group_of = [&](Lane which) {
        return std::find_if(groups.begin(), groups.end(), [&](const auto& group) {
            return std::find(group.begin(), group.end(), number(which)) != group.end();
        });
    };
    std::vector<Lane> out;
    for (const Lane other : active_lanes()) {
        const auto group = group_of(other);
        if (other != lane && (group == groups.end() || group != group_of(lane))) {
            out.push_back(other);
        }
    }
    return out;
}

Task<void> Engine::compare_lanes(Lane one) {
    auto other = co_await lane_with_open_codes(partners_of(one));
    if (!other) co_return other.error();
    if (!*other || should_stop()) co_return Result<void>{};
    std::vector<std::string> alone{item::alone}, together{item::together};
    for (const Lane lane : {one, **other}) {
        if (state_.item(item::alone, lane) != nullptr) continue;  // before an interruption
        auto reading = run_items({lane}, alone);
        if (auto read = co_await std::move(reading); !read) co_return read.error();
    }
    auto both = run_items({one, **other}, together);
    if (auto read = co_await std::move(both); !read) co_return read.error();
    const PairReadings first{one, state_.item(item::alone, one), state_.item(item::together, one)};
    const PairReadings second{**other, state_.item(item::alone, **other),
                              state_.item(item::together, **other)};
    for (const PairReadings* pair : {&first, &second}) {
        const bool whole = pair->alone != nullptr && pair->together != nullptr &&
                           pair->alone->result == ItemResult::passed;
        if (!whole) co_return Result<void>{};  // stopped, or a lane failed meanwhile
    }
    const MonitorNoise declared = monitor_noise_of(plan_.board);
    const bool latched = !counts(plan_.board);
    PreflightItem item = parallel_item(first, second, latched ? declared.height_step_mv : 0,
                                       latched ? declared.width_step_ui : 0);
    if (item.result == ItemResult::noted) {
        bench_.say("preflight: " + item.found + "; the run goes one lane at a time");
    }
    auto storing = append(std::move(item));
    co_return co_await std::move(storing);
}

// What was measured is from now on the lanes' noise. Lanes that have searched keep theirs.
Task<void> Engine::choose_noise() {
    const auto noise = measured_noise(state_, monitor_noise_of(plan_.board));
    if (!noise) co_return Result<void>{};
    const RunId from = state_.measured_item(item::repeatability)->from;
    std::vector<Event> events;
    for (const Lane lane : active_lanes()) {
        const LaneState& known = state_.lanes[number(lane)];
        if (!known.searched && !known.noise) events.push_back(NoiseChosen{lane, *noise, from});
    }
    if (events.empty()) co_return Result<void>{};
    co_return co_await append(std::move(events));
}

// In the order in which each builds on what was found good before; the first group with a failed
// item ends it, unless the preflight is all that is wanted.
Task<void> Engine::preflight() {
    auto resumed = co_await resume_items();
    if (!resumed) co_return resumed.error();
    using PreflightPart = Task<void> (Engine::*)();
    for (const PreflightPart part :
         {&Engine::check_status, &Engine::check_monitors, &Engine::measure_board,
          &Engine::check_monitors_at_open_codes, &Engine::choose_noise}) {
        if (should_stop()) co_return Result<void>{};
        auto done = co_await (this->*part)();
        if (!done) co_return done.error();
        if (auto fit = failed_items(); !fit) co_return fit.error();
    }
    co_return Result<void>{};
}

}  // namespace lanewright
