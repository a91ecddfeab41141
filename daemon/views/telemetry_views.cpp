#include "daemon/views/telemetry_views.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <nlohmann/json.hpp>

#include "adapt/search/text.hpp"

namespace lanewright {

using json = nlohmann::ordered_json;

namespace {

struct Span {
    std::string name;
    double first = 0, last = 0, least = 0, most = 0;
};

void add(std::vector<Span>& spans, const Reading& reading) {
    for (const Telemetry& each : reading.telemetry) {
        if (!std::isfinite(each.value)) continue;
        auto span = std::find_if(spans.begin(), spans.end(),
                                 [&](const Span& known) { return known.name == each.name; });
        if (span == spans.end()) {
            spans.push_back({each.name, each.value, each.value, each.value, each.value});
            continue;
        }
        span->last = each.value;
        span->least = std::min(span->least, each.value);
        span->most = std::max(span->most, each.value);
    }
}

}  // namespace

json telemetry_json(const LaneState& lane) {
    std::vector<Span> spans;
    for (const LaneReadingRecord& record : lane.readings) add(spans, record.reading);
    json out = json::object();
    for (const Span& span : spans) {
        out[span.name] = {
            {"first", span.first}, {"last", span.last}, {"least", span.least}, {"most", span.most}};
    }
    return out;
}

std::string telemetry_text(const RunView& view) {
    std::vector<Span> spans;
    for (const auto& [number_of_lane, lane] : view.state.lanes) {
        for (const LaneReadingRecord& record : lane.readings) add(spans, record.reading);
    }
    std::string out;
    for (const Span& span : spans) {
        out += (out.empty() ? "telemetry: " : ", ") + span.name + " " + general(span.least, 5);
        if (span.most > span.least) out += " to " + general(span.most, 5);
    }
    return out;
}

std::vector<std::string> telemetry_names(const RunView& view) {
    std::vector<std::string> out;
    for (const auto& [number_of_lane, lane] : view.state.lanes) {
        for (const LaneReadingRecord& record : lane.readings) {
            for (const Telemetry& each : record.reading.telemetry) {
                if (std::find(out.begin(), out.end(), each.name) == out.end()) {
                    out.push_back(each.name);
                }
            }
        }
    }
    return out;
}

std::string telemetry_cells(const std::vector<std::string>& names, const Reading& reading) {
    std::string out;
    for (const std::string& name : names) {
        const auto found = std::find_if(reading.telemetry.begin(), reading.telemetry.end(),
                                        [&](const Telemetry& each) { return each.name == name; });
        out += ",";
        if (found == reading.telemetry.end() || !std::isfinite(found->value)) continue;
        char cell[40];
        std::snprintf(cell, sizeof cell, "%.17g", found->value);
        out += cell;
    }
    return out;
}

}  // namespace lanewright
