#include "daemon/views/preflight_views.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <nlohmann/json.hpp>

#include "adapt/search/text.hpp"
#include "daemon/engine/lane_setup.hpp"
#include "daemon/engine/preflight_probe.hpp"
#include "daemon/views/run_json.hpp"
#include "daemon/views/run_text.hpp"

namespace lanewright {

using json = nlohmann::ordered_json;

namespace {

constexpr std::size_t text_column = 28;

// Items of several lanes that found the same.
struct Line {
    const PreflightItem* item = nullptr;
    std::vector<std::uint16_t> lanes;
};

std::vector<Line> lines_of(const RunState& state) {
    std::vector<Line> out;
    for (const PreflightItem& item : state.preflight) {
        auto same = std::find_if(out.begin(), out.end(), [&](const Line& line) {
            return line.item->name == item.name && line.item->result == item.result &&
                   line.item->found == item.found && line.item->lane.has_value() &&
                   item.lane.has_value();
        });
        if (same == out.end()) same = out.insert(out.end(), Line{&item, {}});
        if (item.lane) same->lanes.push_back(number(*item.lane));
    }
    return out;
}

std::string lanes_text(std::vector<std::uint16_t> lanes) {
    std::sort(lanes.begin(), lanes.end());
    std::string out = lanes.size() == 1 ? "lane " : "lanes ";
    for (std::size_t i = 0; i < lanes.size(); ++i) {
        std::size_t last = i;
        while (last + 1 < lanes.size() && lanes[last + 1] == lanes[last] + 1) ++last;
        out += (i > 0 ? "," : "") + std::to_string(lanes[i]);
        if (last > i) out += (last > i + 1 ? "-" : ",") + std::to_string(lanes[last]);
        i = last;
    }
    return out;
}

// "  repeatability   passed    lane 0: sigma of ...", the rest below in the same column.
std::string line_text(const Line& line) {
    const PreflightItem& item = *line.item;
    const std::string indent(text_column, ' ');
    char head[64];
    std::snprintf(head, sizeof head, "  %-15.15s %-9.9s ", item.name.c_str(),
                  item.result == ItemResult::not_shown ? "not shown" : name_of(item.result));
    std::string text = line.lanes.empty() ? "" : lanes_text(line.lanes) + ": ";
    text += item.found;
    if (!item.from.empty()) text += " (measured by run " + item.from + ")";
    std::string out = wrapped(text, indent);
    out.replace(0, text_column, head);
    if (item.result == ItemResult::failed) {
        out += wrapped("expected: " + item.expected, indent);
        if (!item.advice.empty()) out += wrapped("do: " + item.advice, indent);
    }
    return out;
}

std::string noise_sentence(const MonitorNoise& noise, const RunId& from) {
    return "noise of one edge, used in place of the declared one: " +
           fixed(noise.height_sigma_mv, 2) + " mV, " + fixed(noise.width_sigma_ui, 4) +
           " UI (1 sigma, measured" + (from.empty() ? "" : " by run " + from) + ")";
}

const NoiseChosen* noise_of_run(const RunState& state) {
    for (const auto& [lane, known] : state.lanes) {
        if (known.noise) return &*known.noise;
    }
    return nullptr;
}

json item_json(const RunView& view, const PreflightItem& item) {
    json values = json::object();
    for (const auto& [name, value] : item.values) values[name] = value;
    return {{"name", item.name},
            {"lane", item.lane ? json(number(*item.lane)) : json(nullptr)},
            {"result", name_of(item.result)},
            {"found", item.found},
            {"expected", item.expected},
            {"advice", item.advice},
            {"codes", item.codes ? codes_json(view.space, *item.codes) : json(nullptr)},
            {"settings", item.settings.empty() ? json(nullptr) : json(item.settings)},
            {"values", std::move(values)},
            {"from", item.from.empty() ? json(nullptr) : json(item.from)}};
}

bool goes_one_at_a_time(const RunState& state) {
    const PreflightItem* parallel = state.measured_item(item::parallel);
    return parallel != nullptr && parallel->result == ItemResult::noted;
}

std::vector<ReferenceReading> references(const RunView& view, const LaneState& lane) {
    return reference_readings(lane, monitor_noise_of(view.board), !counts(view.board));
}

}  // namespace

bool preflight_passed(const RunState& state) {
    return std::none_of(state.preflight.begin(), state.preflight.end(),
                        [](const PreflightItem& item) {
                            return item.result == ItemResult::failed && item.name != item::together;
                        });
}

MonitorNoise noise_of(const RunView& view, const LaneState& lane) {
    return lane.noise ? lane.noise->noise : monitor_noise_of(view.board);
}

std::string preflight_table(const RunView& view) {
    std::string out;
    for (const Line& line : lines_of(view.state)) out += line_text(line);
    if (const NoiseChosen* noise = noise_of_run(view.state)) {
        out += wrapped(noise_sentence(noise->noise, noise->from), "  ");
    }
    return out;
}

std::string preflight_summary(const RunView& view) {
    if (view.state.preflight.empty()) return {};
    std::size_t passed = 0;
    std::string rest;
    for (const Line& line : lines_of(view.state)) {
        if (line.item->result == ItemResult::passed) {
            ++passed;
        } else {
            rest += line_text(line);
        }
    }
    std::string out = "preflight: " + std::to_string(passed) + " items passed\n" + rest;
    if (const NoiseChosen* noise = noise_of_run(view.state)) {
        out += wrapped(noise_sentence(noise->noise, noise->from), "  ");
    }
    return out;
}

json preflight_json(const RunView& view) {
    if (view.state.preflight.empty()) return nullptr;
    json items = json::array();
    for (const PreflightItem& item : view.state.preflight) items.push_back(item_json(view, item));
    const NoiseChosen* noise = noise_of_run(view.state);
    json used = nullptr;
    if (noise != nullptr) {
        used = {{"height_sigma_mv", noise->noise.height_sigma_mv},
                {"width_sigma_ui", noise->noise.width_sigma_ui},
                {"from", noise->from.empty() ? json(nullptr) : json(noise->from)}};
    }
    return {{"passed", preflight_passed(view.state)},
            {"one_at_a_time", goes_one_at_a_time(view.state)},
            {"noise", std::move(used)},
            {"items", std::move(items)}};
}

json measured_json(const RunView& view) {
    json out{{"format", "lanewright-preflight/1"},
             {"run", view.manifest.run},
             {"status", run_status(view)},
             {"board", view.manifest.board},
             {"simulated", view.manifest.identity.simulated},
             {"condition",
              view.manifest.condition.empty() ? json(nullptr) : json(view.manifest.condition)},
             {"tags", view.manifest.tags}};
    const json found = preflight_json(view);
    if (found.is_null()) {
        out["passed"] = nullptr;
    } else {
        for (const auto& [key, value] : found.items()) out[key] = value;
    }
    if (view.state.ended && !view.state.ended->reason.empty()) {
        out["ending"] = view.state.ended->reason;
    }
    return out;
}

json noise_json(const RunView& view, const LaneState& lane) {
    const MonitorNoise noise = noise_of(view, lane);
    const bool measured = lane.noise.has_value();
    return {
        {"basis", measured ? "measured" : "declared"},
        {"height_sigma_mv", noise.height_sigma_mv},
        {"width_sigma_ui", noise.width_sigma_ui},
        {"from", measured && !lane.noise->from.empty() ? json(lane.noise->from) : json(nullptr)}};
}

json reference_json(const RunView& view, const LaneState& lane) {
    const std::vector<ReferenceReading> all = references(view, lane);
    json shifts = json::array();
    for (const ReferenceReading& each : all) {
        if (!each.shift) continue;
        json shift{{"after_readings", each.after_readings},
                   {"time", iso8601(each.at_ns, view.manifest.zone)},
                   {"eye", each.shift->gone ? "gone" : "open"}};
        if (!each.shift->gone) {
            shift["edge"] = each.shift->edge;
            shift["before"] = each.shift->before;
            shift["now"] = each.shift->now;
            shift["standard_errors"] = each.shift->standard_errors;
        }
        shifts.push_back(std::move(shift));
    }
    return {{"reading_count", all.size()},
            {"reset_count", lane.reset_count},
            {"shifts", std::move(shifts)}};
}

std::vector<std::string> reference_notes(const RunView& view, const LaneState& lane) {
    std::vector<std::string> out;
    const std::vector<ReferenceReading> all = references(view, lane);
    std::size_t shifted = 0;
    const ReferenceReading* worst = nullptr;
    for (const ReferenceReading& each : all) {
        if (!each.shift) continue;
        ++shifted;
        const bool larger = worst == nullptr || each.shift->gone ||
                            each.shift->standard_errors > worst->shift->standard_errors;
        if (larger && (worst == nullptr || !worst->shift->gone)) worst = &each;
    }
    if (worst != nullptr) {
        out.push_back("the reference code, read again " + std::to_string(all.size()) +
                      (all.size() == 1 ? " time" : " times") + ", had moved " +
                      std::to_string(shifted) + " of them; most after " +
                      std::to_string(worst->after_readings) +
                      " readings: " + text_of(*worst->shift));
    }
    if (lane.reset_count > 0) {
        out.push_back("the board reset " + std::to_string(lane.reset_count) +
                      (lane.reset_count == 1 ? " time" : " times") +
                      " while the lane was worked on");
    }
    return out;
}

}  // namespace lanewright
