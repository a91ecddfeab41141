#include "daemon/views/run_json.hpp"

#include <cmath>
#include <nlohmann/json.hpp>

#include "daemon/store/value_json.hpp"
#include "daemon/views/preflight_views.hpp"
#include "daemon/views/replay_views.hpp"
#include "daemon/views/telemetry_views.hpp"

namespace lanewright {

using json = nlohmann::ordered_json;

namespace {

// JSON has no infinity: a limit that is not known is null.
json number_or_null(double value) {
    return std::isfinite(value) ? json(value) : json(nullptr);
}

json number_or_null(const std::optional<double>& value) {
    return value ? number_or_null(*value) : json(nullptr);
}

// An edge of a closed eye is known as "at most" only: no value was measured.
bool measured_value(const std::optional<Measured>& measured) {
    return measured && measured->bound != Bound::at_most;
}

json value_of(const std::optional<Measured>& measured) {
    return measured_value(measured) ? number_or_null(measured->value) : json(nullptr);
}

json error_of(const std::optional<Measured>& measured) {
    return measured_value(measured) ? number_or_null(measured->std_error) : json(nullptr);
}

json opening(const std::optional<Measured>& whole, const std::optional<Measured>& one,
             const std::optional<Measured>& other) {
    if (whole) return value_of(whole);
    if (measured_value(one) && measured_value(other)) {
        return number_or_null(one->value + other->value);
    }
    return nullptr;
}

json margin_json(const RunView& view, const std::optional<Margin>& margin) {
    if (!margin) return nullptr;
    const Reading& reading = margin->reading;
    const Score& score = margin->score;
    const Systematic systematic = systematic_of(view.board, reading);
    json out{{"status", name_of(reading.status)},
             {"up_mv", value_of(reading.up_mv)},
             {"up_se_mv", error_of(reading.up_mv)},
             {"down_mv", value_of(reading.down_mv)},
             {"down_se_mv", error_of(reading.down_mv)},
             {"left_ui", value_of(reading.left_ui)},
             {"left_se_ui", error_of(reading.left_ui)},
             {"right_ui", value_of(reading.right_ui)},
             {"right_se_ui", error_of(reading.right_ui)},
             {"height_mv", opening(reading.height_mv, reading.up_mv, reading.down_mv)},
             {"width_ui", opening(reading.width_ui, reading.left_ui, reading.right_ui)},
             {"height_systematic_mv", number_or_null(systematic.height_mv)},
             {"width_systematic_ui", number_or_null(systematic.width_ui)},
             {"score", score.bound == Bound::at_most ? json(nullptr) : number_or_null(score.value)},
             {"score_low", number_or_null(score.low)},
             {"score_high", number_or_null(score.high)},
             {"basis", name_of(score.basis)},
             {"error_ratio", reading.error_ratio},
             {"error_definition", name_of(reading.error_definition)}};
    if (reading.centred_assumed) out["centred"] = "assumed";
    return out;
}

json response_json(const std::optional<Response>& response) {
    if (!response) return nullptr;
    return {{"dc_db", response->dc_db},           {"hf_db", response->hf_db},
            {"peaking_db", response->peaking_db}, {"zero_ghz", response->zero_ghz},
            {"pole_ghz", response->pole_ghz},     {"level_ohm", response->level_ohm}};
}

json codes_or_null(const CodeSpace& space, const std::optional<Codes>& codes) {
    return codes ? codes_json(space, *codes) : json(nullptr);
}

json identity_json(const Identity& identity) {
    json out = json::object();
    for (const IdentityValue& value : identity.values) out[value.name] = value.value;
    return out;
}

json link_json(const LinkCounts& link) {
    return {{"frames", link.frames},
            {"bad_frames", link.bad_frames},
            {"retries", link.retries},
            {"reconnects", link.reconnects},
            {"resets", link.resets}};
}

double bench_s_of(const std::vector<LaneResult>& lanes) {
    double sum = 0;
    for (const LaneResult& lane : lanes) sum += lane.bench_s;
    return sum;
}

}  // namespace

json codes_json(const CodeSpace& space, const Codes& codes) {
    json out = json::object();
    for (std::size_t i = 0; i < codes.value.size() && i < space.dimensions().size(); ++i) {
        out[space.dimensions()[i].name] = codes.value[i];
    }
    return out;
}

json lane_json(const RunView& view, const LaneResult& lane) {
    json out{{"lane", lane.lane},
             {"verdict", lane.judgement ? json(name_of(lane.judgement->verdict)) : json(nullptr)},
             {"outcome", lane.outcome ? json(name_of(*lane.outcome)) : json(nullptr)},
             {"left", lane.left ? json(name_of(*lane.left)) : json(nullptr)},
             {"former_codes", codes_or_null(view.space, lane.former)},
             {"codes", codes_or_null(view.space, lane.decided)},
             {"before", margin_json(view, lane.before)},
             {"after", margin_json(view, lane.after)},
             {"response", response_json(lane.response)},
             {"reading_count", lane.reading_count},
             {"side_reading_count", lane.side_reading_count},
             {"void_count", lane.void_count},
             {"bit_count", lane.bit_count},
             {"bench_s", lane.bench_s},
             {"side_bench_s", lane.side_bench_s},
             {"reason", lane.reason},
             {"notes", lane.notes}};
    if (lane.judgement && lane.judgement->verdict == Verdict::undecided) {
        out["deciding_bench_s"] =
            lane.judgement->deciding_s ? json(*lane.judgement->deciding_s) : json(nullptr);
    }
    if (const auto known = view.state.lanes.find(lane.lane); known != view.state.lanes.end()) {
        out["noise"] = noise_json(view, known->second);
        out["reference"] = reference_json(view, known->second);
        out["telemetry"] = telemetry_json(known->second);
    }
    if (lane.judgement) out["verdict_reason"] = lane.judgement->reason;
    return out;
}

json run_json(const RunView& view) {
    const Manifest& manifest = view.manifest;
    const std::vector<LaneResult> lanes = lane_results(view);
    json lane_list = json::array();
    for (const LaneResult& lane : lanes) lane_list.push_back(lane_json(view, lane));
    json out{{"format", "lanewright-run/1"},
             {"run", manifest.run},
             {"status", run_status(view)},
             {"started", iso8601(manifest.started_ns, manifest.zone)},
             {"board", manifest.board},
             {"simulated", manifest.identity.simulated},
             {"identity", identity_json(manifest.identity)},
             {"recipe", manifest.recipe},
             {"seed", manifest.seed},
             {"tags", manifest.tags},
             {"condition", manifest.condition.empty() ? json(nullptr) : json(manifest.condition)},
             {"bench_s", bench_s_of(lanes)},
             {"wall_s", view.state.wall_s},
             {"link", link_json(view.state.link)},
             {"preflight", preflight_json(view)},
             {"lanes", std::move(lane_list)}};
    if (view.state.ended && !view.state.ended->reason.empty()) {
        out["ending"] = view.state.ended->reason;
    }
    if (manifest.imported) {
        const Import& from = *manifest.imported;
        out["imported"] = {{"readings", from.readings_path},
                           {"sha256", from.readings_sha256},
                           {"columns", from.columns.path},
                           {"pattern", from.pattern},
                           {"row_count", from.row_count},
                           {"rejected_count", from.rejected_count},
                           {"unknown", unknown_of(manifest, view.state)}};
    }
    return out;
}

json run_summary_json(const RunView& view) {
    const std::vector<LaneResult> lanes = lane_results(view);
    std::size_t meets = 0, finished = 0;
    for (const LaneResult& lane : lanes) {
        if (lane.judgement && lane.judgement->verdict == Verdict::meets) ++meets;
        if (lane.outcome) ++finished;
    }
    return {{"run", view.manifest.run},
            {"status", run_status(view)},
            {"started", iso8601(view.manifest.started_ns, view.manifest.zone)},
            {"board", view.manifest.board},
            {"simulated", view.manifest.identity.simulated},
            {"recipe", view.manifest.recipe},
            {"purpose", view.manifest.purpose == Purpose::preflight ? "preflight" : "tune"},
            {"seed", view.manifest.seed},
            {"tags", view.manifest.tags},
            {"lane_count", lanes.size()},
            {"finished_count", finished},
            {"meets_count", meets},
            {"bench_s", bench_s_of(lanes)}};
}

json error_json(const Fault& fault, int exit_code) {
    json error{{"what", fault.text()}, {"cause", name_of(fault.cause)}, {"exit", exit_code}};
    if (!fault.board.empty()) error["board"] = fault.board;
    if (fault.lane) error["lane"] = number(*fault.lane);
    if (!fault.reg.empty()) error["register"] = fault.reg;
    if (!fault.hint.empty()) error["hint"] = fault.hint;
    return {{"error", std::move(error)}};
}

}  // namespace lanewright
