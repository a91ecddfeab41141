#include "daemon/views/lane_result.hpp"

#include <cmath>
#include <utility>

#include "daemon/engine/lane_setup.hpp"
#include "daemon/replay/run_files.hpp"
#include "daemon/store/store.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/preflight_views.hpp"

namespace lanewright {

namespace {

std::vector<Reading> fresh_readings(const LaneState& lane, const Codes& codes) {
    std::vector<Reading> out;
    for (const LaneReadingRecord& record : lane.readings) {
        if (record.stage == Stage::compare && record.reading.codes == codes) {
            out.push_back(record.reading);
        }
    }
    return out;
}

std::optional<Margin> margin_of(const std::vector<Reading>& readings, const RunView& view,
                                const MonitorNoise& noise) {
    if (readings.empty()) return std::nullopt;
    Margin margin;
    margin.reading = mean_of(readings, noise);
    margin.score = score_of(margin.reading, view.recipe.required);
    return margin;
}

}  // namespace

Systematic systematic_of(const BoardFile& board, const Reading& reading) {
    const auto opening = [](const std::optional<Measured>& whole,
                            const std::optional<Measured>& one,
                            const std::optional<Measured>& other) -> std::optional<double> {
        const auto seen = [](const auto& edge) { return edge && edge->bound != Bound::at_most; };
        if (seen(whole)) return whole->value;
        if (seen(one) && seen(other)) return one->value + other->value;
        return std::nullopt;
    };
    Systematic out;
    if (const auto height = opening(reading.height_mv, reading.up_mv, reading.down_mv)) {
        out.height_mv = systematic_mv(*height, board.monitor.height.tolerance);
    }
    if (const auto width = opening(reading.width_ui, reading.left_ui, reading.right_ui)) {
        out.width_ui = std::abs(*width) * board.monitor.width.tolerance;
    }
    return out;
}

RunView view_of(const RunRow& row, const Database& database) {
    RunView view;
    view.manifest = row.manifest;
    RunFiles files = files_of(row.manifest);
    view.board = std::move(files.board);
    view.recipe = std::move(files.recipe);
    view.space = code_space_of(view.board);
    view.state = fold(all_events(database, row.id));
    if (!view.state.ended) {
        const std::int64_t worker =
            view.state.resumptions > 0 ? view.state.resumed_by : row.manifest.pid;
        view.running = worker != 0 && Store::holder(database.path()) == worker;
    }
    return view;
}

LaneResult lane_result(const RunView& view, std::uint16_t lane_number) {
    LaneResult out;
    out.lane = lane_number;
    const auto found = view.state.lanes.find(lane_number);
    if (found == view.state.lanes.end()) return out;
    const LaneState& lane = found->second;
    out.former = lane.former();
    out.left = lane.settled;
    out.void_count = lane.void_count;
    out.reading_count = lane.readings.size();
    for (const LaneReadingRecord& record : lane.readings) {
        out.bit_count += record.reading.bit_count;
        out.bench_s += record.reading.cost_s;
        if (record.stage != Stage::preflight && record.stage != Stage::reference) continue;
        ++out.side_reading_count;
        out.side_bench_s += record.reading.cost_s;
    }
    if (lane.finished) {
        out.outcome = lane.finished->outcome;
        out.reason = lane.finished->reason;
    }
    out.notes = reference_notes(view, lane);
    if (!lane.decision) return out;
    out.decided = lane.decision->codes;
    out.notes.insert(out.notes.begin(), lane.decision->notes.begin(), lane.decision->notes.end());
    const MonitorNoise noise = noise_of(view, lane);
    if (out.reason.empty()) out.reason = lane.decision->reason;
    out.response = response_of(view.space, *out.decided);
    if (out.former) out.before = margin_of(fresh_readings(lane, *out.former), view, noise);
    const std::vector<Reading> after = fresh_readings(lane, *out.decided);
    out.after = margin_of(after, view, noise);
    if (out.after && out.outcome != LaneOutcome::failed) {
        out.judgement = judge(after, view.recipe.required, noise, view.recipe.accept_extrapolated);
    }
    return out;
}

std::vector<LaneResult> lane_results(const RunView& view) {
    std::vector<LaneResult> out;
    for (const std::uint16_t lane : view.manifest.lanes) out.push_back(lane_result(view, lane));
    return out;
}

std::string run_status(const RunView& view) {
    if (view.state.ended) return name_of(view.state.ended->ending);
    return view.running ? "running" : "interrupted";
}

bool all_meet(const RunView& view) {
    for (const LaneResult& lane : lane_results(view)) {
        if (!lane.judgement || lane.judgement->verdict != Verdict::meets) return false;
    }
    return true;
}

}  // namespace lanewright
