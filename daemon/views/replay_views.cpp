#include "daemon/views/replay_views.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <nlohmann/json.hpp>

#include "adapt/search/text.hpp"
#include "daemon/views/run_json.hpp"
#include "daemon/views/run_text.hpp"

namespace lanewright {

using json = nlohmann::ordered_json;

namespace {

template <class... Values>
std::string format(const char* pattern, Values... values) {
    char text[256];
    std::snprintf(text, sizeof text, pattern, values...);
    return text;
}

json number_or_null(double value) {
    return std::isfinite(value) ? json(value) : json(nullptr);
}

json codes_or_null(const CodeSpace& space, const std::optional<Codes>& codes) {
    return codes ? codes_json(space, *codes) : json(nullptr);
}

json ratio_or_null(double ratio) {
    return ratio > 0 ? json(ratio) : json(nullptr);
}

json number_or_null(const std::optional<double>& value) {
    return value ? number_or_null(*value) : json(nullptr);
}

// With the error ratio at which it holds, and what the step's tolerance may add or take.
json score_json(const BoardFile& board, const Score& score, const Reading& mean, double ratio) {
    const Systematic systematic = systematic_of(board, mean);
    return {{"score", score.bound == Bound::at_most ? json(nullptr) : number_or_null(score.value)},
            {"score_low", number_or_null(score.low)},
            {"score_high", number_or_null(score.high)},
            {"error_ratio", ratio_or_null(ratio)},
            {"basis", name_of(score.basis)},
            {"height_systematic_mv", number_or_null(systematic.height_mv)},
            {"width_systematic_ui", number_or_null(systematic.width_ui)}};
}

json selected_json(const BoardFile& board, const std::optional<SelectedMargin>& selected) {
    if (!selected) return nullptr;
    json out = score_json(board, selected->raw, selected->mean, selected->error_ratio);
    out["shrunk_score"] = selected->score ? number_or_null(*selected->score) : json(nullptr);
    out["shrunk_std_error"] = selected->score ? number_or_null(selected->std_error) : json(nullptr);
    out["compared_with"] = selected->compared_with;
    if (!selected->why_not.empty()) out["why_not_shrunk"] = selected->why_not;
    return out;
}

json fresh_json(const BoardFile& board, const ReplayedLane& lane) {
    if (!lane.fresh) return nullptr;
    json out = score_json(board, lane.fresh->score, lane.fresh_mean, lane.fresh_error_ratio);
    out["verdict"] = name_of(lane.fresh->verdict);
    out["reason"] = lane.fresh->reason;
    out["reading_count"] = lane.fresh_count;
    return out;
}

// The strategy speaks as on a board; here it saw only what was handed out.
std::string reason_of(const Decision& decision) {
    constexpr std::string_view read = "that were read";
    std::string out = decision.reason;
    const std::size_t at = out.find(read);
    return at == std::string::npos ? out : out.insert(at + read.size(), " in this replay");
}

json lane_json(const CodeSpace& space, const BoardFile& board, const ReplayedLane& lane) {
    json never = json::array();
    for (const Codes& codes : lane.never_read) never.push_back(codes_json(space, codes));
    json out{{"lane", lane.lane},
             {"cause", lane.cause.empty() ? json(nullptr) : json(lane.cause)},
             {"logged_readings", lane.logged_readings},
             {"logged_codes", lane.logged_codes},
             {"former_codes", codes_or_null(space, lane.present)},
             {"codes_then", codes_or_null(space, lane.then)},
             {"codes", nullptr},
             {"unchanged", nullptr},
             {"reading_count", lane.handed_out},
             {"handed_out_again", lane.again},
             {"never_read_count", lane.never_read.size()},
             {"never_read", std::move(never)},
             {"rest_left_out", lane.rest_left_out},
             {"same_until", lane.same_until ? json(*lane.same_until) : json(nullptr)},
             {"read_at_error_ratio", ratio_or_null(lane.read_at)},
             {"selected", selected_json(board, lane.selected)},
             {"fresh", fresh_json(board, lane)}};
    if (!lane.decision) return out;
    out["codes"] = codes_json(space, lane.decision->codes);
    out["unchanged"] = lane.decision->unchanged;
    out["standard_readings"] = lane.decision->standard_readings;
    out["bench_s"] = lane.decision->bench_s;
    out["reason"] = reason_of(*lane.decision);
    out["notes"] = lane.decision->notes;
    return out;
}

std::string slashed(const std::optional<Codes>& codes) {
    if (!codes) return "-";
    std::string out;
    for (const std::int32_t code : codes->value) {
        out += (out.empty() ? "" : "/") + std::to_string(code);
    }
    return out;
}

std::string score_cell(const std::optional<SelectedMargin>& selected, bool of_raw) {
    if (!selected) return "-";
    const char* mark = selected->raw.basis == Basis::extrapolated ? "*" : "";
    if (!of_raw) return selected->score ? format("%.3f%s", *selected->score, mark) : "-";
    if (selected->raw.bound == Bound::at_most) return "closed";
    return std::isfinite(selected->raw.value) ? format("%.3f%s", selected->raw.value, mark) : "-";
}

bool is_extrapolated(const ReplayedLane& lane) {
    return (lane.selected && lane.selected->raw.basis == Basis::extrapolated) ||
           (lane.fresh && lane.fresh->score.basis == Basis::extrapolated);
}

// "read at error ratio 1e-06", "extrapolated to error ratio 1e-12".
std::string held_at(Basis basis, double ratio) {
    if (!(ratio > 0)) return "at an error ratio that is not known";
    return (basis == Basis::extrapolated ? "extrapolated to error ratio "
                                         : "read at error ratio ") +
           general(ratio, 3);
}

std::string lane_row(const ReplayedLane& lane) {
    const std::optional<Codes> now =
        lane.decision ? std::optional<Codes>(lane.decision->codes) : std::nullopt;
    const char* verdict = !lane.cause.empty() ? "none"
                          : lane.fresh        ? name_of(lane.fresh->verdict)
                                              : "selected";
    return format("%4u %-11s %-11s %6zu %6zu %6zu %6s %6s %s\n", static_cast<unsigned>(lane.lane),
                  slashed(now).c_str(), slashed(lane.then).c_str(), lane.handed_out, lane.again,
                  lane.never_read.size(), score_cell(lane.selected, true).c_str(),
                  score_cell(lane.selected, false).c_str(), verdict);
}

std::string sentence_of(const CodeSpace& space, const ReplayedLane& lane) {
    std::string out = "lane " + std::to_string(lane.lane) + ": ";
    if (!lane.decision) return out + "no decision: " + lane.cause;
    out += text_of(space, lane.decision->codes);
    if (lane.then) {
        out += *lane.then == lane.decision->codes ? ", as then"
                                                  : "; then " + text_of(space, *lane.then);
    }
    out += "; " + reason_of(*lane.decision);
    if (lane.fresh) {
        out += "; by " + std::to_string(lane.fresh_count) + " readings that did not choose them, " +
               held_at(lane.fresh->score.basis, lane.fresh_error_ratio) + ": " + lane.fresh->reason;
    } else if (lane.selected && lane.selected->score) {
        out += "; selected as the best of many: without the luck of it the score is about " +
               fixed(*lane.selected->score, 3) + " (standard error " +
               fixed(lane.selected->std_error, 3) + "), " +
               held_at(lane.selected->raw.basis, lane.selected->error_ratio);
    } else if (lane.selected) {
        out += "; selected as the best of many, by how much luck cannot be told: " +
               lane.selected->why_not;
    }
    return out;
}

// What no number of readings averages away; empty where the board file states no tolerance.
std::string tolerance_of(const BoardFile& board, const ReplayedLane& lane) {
    if (!lane.fresh && !lane.selected) return {};
    const Systematic systematic =
        systematic_of(board, lane.fresh ? lane.fresh_mean : lane.selected->mean);
    std::string out;
    if (systematic.height_mv.value_or(0) > 0) {
        out += "height by " + general(*systematic.height_mv, 3) + " mV";
    }
    if (systematic.width_ui.value_or(0) > 0) {
        out += (out.empty() ? "" : ", ");
        out += "width by " + general(*systematic.width_ui, 3) + " UI";
    }
    if (out.empty()) return out;
    return "the tolerance of the monitor's step may shift every reading alike, " + out +
           " to either side: no limit here holds it";
}

std::vector<std::string> remarks_of(const BoardFile& board, const ReplayedLane& lane) {
    std::vector<std::string> out =
        lane.decision ? lane.decision->notes : std::vector<std::string>{};
    if (std::string tolerance = tolerance_of(board, lane); !tolerance.empty()) {
        out.push_back(std::move(tolerance));
    }
    if (lane.again > 0) {
        out.push_back(std::to_string(lane.again) +
                      " times a reading was handed out again, for want of another one: what the "
                      "reason says of standard errors is too sure");
    }
    if (lane.never_read.empty()) return out;
    std::string never = std::to_string(lane.never_read.size()) +
                        " codes were asked for and never read, first after " +
                        std::to_string(lane.same_until.value_or(0)) +
                        " readings; the strategy was started anew with these taken as not allowed:";
    for (const Codes& codes : lane.never_read) never += " " + slashed(codes);
    out.push_back(std::move(never));
    if (lane.rest_left_out) {
        out.push_back("after " + std::to_string(most_starts) +
                      " starts all codes that were never read were taken as not allowed");
    }
    return out;
}

// Where the readings are of another error ratio than the requirement: what the scores stand for.
std::string ratio_line(const Recipe& recipe, const std::vector<ReplayedLane>& lanes) {
    std::string out;
    for (const ReplayedLane& lane : lanes) {
        if (!lane.decision || same_ratio(recipe.required.error_ratio, lane.read_at)) continue;
        const std::string required = general(recipe.required.error_ratio, 3);
        out = lane.read_at > 0 ? "read at error ratio " + general(lane.read_at, 3)
                               : std::string("read at an error ratio that is not known");
        out += is_extrapolated(lane) ? ": scores with a * are extrapolated to " + required
                                     : ": the scores hold there, and tell nothing of " + required;
        if (!recipe.accept_extrapolated) {
            out += "; a verdict needs readings at " + required;
        }
        return wrapped(out, "");
    }
    return out;
}

std::string simulated_line(bool simulated) {
    return simulated ? "SIMULATED BOARD: these results prove nothing about silicon\n" : "";
}

json difference_json(const std::optional<Difference>& difference) {
    if (!difference) return nullptr;
    const Difference& at = *difference;
    return {{"run", at.run},
            {"lane", number(at.lane)},
            {"event", at.event},
            {"seq", at.seq},
            {"ordinal", at.ordinal ? json(*at.ordinal) : json(nullptr)},
            {"operation", at.operation ? json(*at.operation) : json(nullptr)},
            {"register", at.reg.empty() ? json(nullptr) : json(at.reg)},
            {"what", at.what},
            {"expected", at.expected},
            {"found", at.found}};
}

std::string lanes_text(const std::vector<std::uint16_t>& lanes) {
    std::string out;
    for (const std::uint16_t lane : lanes) out += (out.empty() ? "" : ",") + std::to_string(lane);
    return out;
}

std::vector<std::string> unknown_of(const ColumnMap& columns) {
    std::vector<std::string> out;
    const auto add = [&](const Stated& what, const char* name) {
        if (what.kind == Stated::Kind::unknown) out.emplace_back(name);
    };
    add(columns.error_definition, "error definition");
    add(columns.error_ratio, "error ratio");
    add(columns.condition, "condition");
    if (columns.pattern == "unknown") out.emplace_back("pattern");
    return out;
}

std::string joined(const std::vector<std::string>& words, const char* between = ", ") {
    std::string out;
    for (const std::string& word : words) out += (out.empty() ? "" : between) + word;
    return out;
}

}  // namespace

json replay_json(const ReplayView& view) {
    const Manifest& manifest = view.run.manifest;
    json lanes = json::array();
    for (const ReplayedLane& lane : view.lanes)
        lanes.push_back(lane_json(view.run.space, view.run.board, lane));
    const Required& required = view.recipe.required;
    return {{"format", "lanewright-replay/1"},
            {"run", manifest.run},
            {"board", manifest.board},
            {"simulated", manifest.identity.simulated},
            {"imported", manifest.imported.has_value()},
            {"unknown", unknown_of(manifest, view.run.state)},
            {"recipe", view.recipe.name},
            {"strategy", view.recipe.strategy.name},
            {"required",
             {{"error_ratio", required.error_ratio},
              {"height_mv", required.height_mv},
              {"width_ui", required.width_ui}}},
            {"accept_extrapolated", view.recipe.accept_extrapolated},
            {"seed", manifest.seed},
            {"never_read", "taken as not allowed"},
            {"lanes", std::move(lanes)}};
}

std::string replay_account(const ReplayView& view) {
    const Manifest& manifest = view.run.manifest;
    std::string out = "run " + manifest.run + " replayed with recipe " + view.recipe.name +
                      ", strategy " + view.recipe.strategy.name + "\n";
    const Required& required = view.recipe.required;
    out += format("required %g mV x %g UI at error ratio %g\n", required.height_mv,
                  required.width_ui, required.error_ratio);
    out += ratio_line(view.recipe, view.lanes);
    out += simulated_line(manifest.identity.simulated);
    if (const std::string unknown = unknown_of(manifest, view.run.state); !unknown.empty()) {
        out += wrapped("imported; not known: " + unknown, "");
    }
    out += format("\n%4s %-11s %-11s %6s %6s %6s %6s %6s %s\n", "lane", "this recipe", "the run",
                  "read", "again", "never", "score", "shrunk", "verdict");
    for (const ReplayedLane& lane : view.lanes) out += lane_row(lane);
    out +=
        "this recipe, the run: the codes that each of them decided on\n"
        "read: handed out of the log; again: of these, a second time; never: codes\n"
        "asked for and not in the log; shrunk: score without the luck of the best\n";
    if (std::any_of(view.lanes.begin(), view.lanes.end(), is_extrapolated)) {
        out += "*: extrapolated to the required error ratio, not read there\n";
    }
    out += "\n";
    for (const ReplayedLane& lane : view.lanes) {
        out += wrapped(sentence_of(view.run.space, lane), "  ");
        for (const std::string& remark : remarks_of(view.run.board, lane)) {
            out += wrapped("- " + remark, "    ");
        }
    }
    return out;
}

json strict_json(const StrictReport& report) {
    json lanes = json::array();
    for (const StrictLane& lane : report.lanes) {
        lanes.push_back({{"lane", lane.lane},
                         {"event_count", lane.events},
                         {"reading_count", lane.readings},
                         {"operation_count", lane.operations},
                         {"void_count", lane.void_readings},
                         {"finished", lane.finished}});
    }
    return {{"format", "lanewright-strict-replay/1"},
            {"run", report.run},
            {"same", !report.difference},
            {"notes", report.notes},
            {"not_checked", report.not_checked},
            {"lanes", std::move(lanes)},
            {"difference", difference_json(report.difference)}};
}

std::string strict_account(const StrictReport& report) {
    std::string out = "run " + report.run + " replayed strictly\n";
    for (const std::string& note : report.notes) out += wrapped("note: " + note, "");
    for (const StrictLane& lane : report.lanes) {
        const bool differs = report.difference && number(report.difference->lane) == lane.lane;
        out += format("lane %4u: %zu events, %zu readings, %zu register operations", lane.lane,
                      lane.events, lane.readings, lane.operations) +
               (differs ? ", then a difference\n" : ", all the same\n");
    }
    if (!report.difference) {
        out += "the same program gives what is stored\n";
        return report.not_checked.empty()
                   ? out
                   : out + wrapped("not checked: " + joined(report.not_checked, "; "), "  ");
    }
    const Difference& at = *report.difference;
    std::string where = "DIFFERENCE in lane " + std::to_string(number(at.lane));
    if (at.event == "manifest") where = "DIFFERENCE in the manifest";
    if (at.ordinal) where += ", reading " + std::to_string(*at.ordinal);
    if (at.operation) where += ", operation " + std::to_string(*at.operation);
    if (!at.reg.empty()) where += ", " + at.reg;
    out += wrapped(where + " (event " + std::to_string(at.seq) + ", " + at.event + "): " + at.what,
                   "");
    out += wrapped("expected: " + at.expected, "  ");
    return out + wrapped("found: " + at.found, "  ");
}

json import_json(const ImportView& view) {
    json runs = json::array();
    for (std::size_t i = 0; i < view.rows.runs.size(); ++i) {
        const ImportedRun& run = view.rows.runs[i];
        runs.push_back({{"run", i < view.ids.size() ? json(view.ids[i]) : json(nullptr)},
                        {"condition", run.condition.empty() ? json(nullptr) : json(run.condition)},
                        {"tags", run.tags},
                        {"simulated", run.simulated},
                        {"lanes", run.lanes},
                        {"row_count", run.row_count}});
    }
    json rejected = json::array();
    for (const RejectedRow& row : view.rows.rejected) {
        rejected.push_back({{"line", row.line},
                            {"column", row.column.empty() ? json(nullptr) : json(row.column)},
                            {"reason", row.reason}});
    }
    return {{"format", "lanewright-import/1"},  {"readings", view.readings_path},
            {"columns", view.columns.path},     {"unknown", unknown_of(view.columns)},
            {"row_count", view.rows.row_count}, {"rejected_count", view.rows.rejected.size()},
            {"rejected", std::move(rejected)},  {"not_margins", view.rows.not_margins},
            {"runs", std::move(runs)}};
}

std::string rejected_text(const ImportView& view) {
    std::string out;
    for (const RejectedRow& row : view.rows.rejected) {
        out += (out.empty() ? "" : "\n") + view.readings_path + ":" + std::to_string(row.line) +
               ": " + (row.column.empty() ? "" : row.column + ": ") + row.reason;
    }
    return out;
}

std::string import_account(const ImportView& view) {
    const std::size_t looks = view.rows.not_margins.size();
    std::string out = std::to_string(view.rows.row_count - view.rows.rejected.size() - looks) +
                      " of " + std::to_string(view.rows.row_count) + " rows of " +
                      view.readings_path + " taken, " + std::to_string(view.rows.rejected.size()) +
                      " rejected\n";
    if (looks > 0) {
        out += wrapped(std::to_string(looks) +
                           " rows of the preflight or the reference are not margins and were left "
                           "out, the first in line " +
                           std::to_string(view.rows.not_margins.front()),
                       "");
    }
    for (std::size_t i = 0; i < view.rows.runs.size(); ++i) {
        const ImportedRun& run = view.rows.runs[i];
        out += (i < view.ids.size() ? "run " + view.ids[i] : std::string("not stored")) + "  " +
               std::to_string(run.row_count) + " readings, lanes " + lanes_text(run.lanes) +
               (run.condition.empty() ? "" : ", condition " + run.condition) +
               (run.simulated ? " (SIMULATED)" : "") + "\n";
        for (const auto& [key, value] : run.tags) out += "  tag " + key + "=" + value + "\n";
    }
    const std::string unknown = joined(unknown_of(view.columns));
    if (!unknown.empty()) out += "not known: " + unknown + "; results will say so\n";
    return out;
}

std::string unknown_of(const Manifest& manifest, const RunState& state) {
    if (!manifest.imported) return {};
    std::vector<std::string> out;
    bool definition = false;
    for (const auto& [lane, each] : state.lanes) {
        for (const LaneReadingRecord& record : each.readings) {
            definition = definition || record.reading.error_definition == ErrorDefinition::unknown;
        }
    }
    if (definition) out.emplace_back("error definition");
    if (!manifest.imported->error_ratio_known) out.emplace_back("error ratio");
    if (!manifest.imported->condition_known) out.emplace_back("condition");
    if (manifest.imported->pattern == "unknown") out.emplace_back("pattern");
    return joined(out);
}

}  // namespace lanewright
