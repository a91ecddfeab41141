#include "daemon/views/lane_result.hpp"

#include <utility>

#include "daemon/engine/lane_setup.hpp"
#include "daemon/store/store.hpp"
#include "daemon/store/store_error.hpp"

namespace lanewright {

namespace {

template <class T, class Decode>
T decoded(const SourceFile& file, const Decode& decode) {
    Complaints complaints;
    std::optional<T> out;
    if (auto document = Document::parse(file.text, file.path, complaints)) {
        out = decode(*document, complaints);
    }
    if (!out || complaints.any()) {
        throw BadStoreData("the run's copy of " + file.path + " cannot be read by this version:\n" +
                           complaints.text());
    }
    return std::move(*out);
}

std::vector<Reading> fresh_readings(const LaneState& lane, const Codes& codes) {
    std::vector<Reading> out;
    for (const LaneReadingRecord& record : lane.readings) {
        if (record.stage == Stage::compare && record.reading.codes == codes) {
            out.push_back(record.reading);
        }
    }
    return out;
}

std::optional<Margin> margin_of(const std::vector<Reading>& readings, const RunView& view) {
    if (readings.empty()) return std::nullopt;
    Margin margin;
    margin.reading = mean_of(readings, monitor_noise_of(view.board));
    margin.score = score_of(margin.reading, view.recipe.required);
    return margin;
}

}  // namespace

RunView view_of(const RunRow& row, const Database& database) {
    RunView view;
    view.manifest = row.manifest;
    view.board = decoded<BoardFile>(
        row.manifest.board_file,
        [](const Document& document, Complaints& all) { return decode_board_file(document, all); });
    view.recipe = decoded<Recipe>(row.manifest.recipe_file, decode_recipe);
    view.space = code_space_of(view.board);
    view.state = fold(all_events(database, row.id));
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
    }
    if (lane.finished) {
        out.outcome = lane.finished->outcome;
        out.reason = lane.finished->reason;
    }
    if (!lane.decision) return out;
    out.decided = lane.decision->codes;
    out.notes = lane.decision->notes;
    if (out.reason.empty()) out.reason = lane.decision->reason;
    out.response = response_of(view.space, *out.decided);
    if (out.former) out.before = margin_of(fresh_readings(lane, *out.former), view);
    const std::vector<Reading> after = fresh_readings(lane, *out.decided);
    out.after = margin_of(after, view);
    if (out.after && out.outcome != LaneOutcome::failed) {
        out.judgement = judge(after, view.recipe.required, monitor_noise_of(view.board),
                              view.recipe.accept_extrapolated);
    }
    return out;
}

std::vector<LaneResult> lane_results(const RunView& view) {
    std::vector<LaneResult> out;
    for (const std::uint16_t lane : view.manifest.lanes) out.push_back(lane_result(view, lane));
    return out;
}

std::string run_status(const RunState& state) {
    return state.ended ? name_of(state.ended->ending) : "interrupted";
}

bool all_meet(const RunView& view) {
    for (const LaneResult& lane : lane_results(view)) {
        if (!lane.judgement || lane.judgement->verdict != Verdict::meets) return false;
    }
    return true;
}

}  // namespace lanewright
