#include "daemon/engine/preflight.hpp"

#include <algorithm>
#include <cmath>

#include "adapt/search/score.hpp"
#include "adapt/search/text.hpp"
#include "adapt/stats/normal.hpp"
#include "daemon/engine/preflight_probe.hpp"

namespace lanewright {

namespace {

struct Advice {
    const char* name;
    const char* text;
};
constexpr Advice advices[] = {
    {"reference_clock", "Connect and switch on the reference clock, and check its frequency"},
    {"lock", "Check cable, transmitter and power of the far end, or leave the lane out (--lanes)"},
    {"pattern_sync", "Start the same pattern at the far end and in the checker"},
    {"polarity", "Swap the pair's legs, or set the polarity inversion of one end"},
    {"lane_order", "Lanes are swapped: check the cabling, or the lane mapping of the chip"},
    {"loops", "Set the on-chip loops as the board file's sequences expect them"},
};

std::string advice_for(const std::string& name) {
    for (const Advice& advice : advices) {
        if (name == advice.name) return advice.text;
    }
    return "Check the board, or what the board file expects there";
}

const StatusItem* find(const LaneStatus& status, const std::string& name) {
    const auto found = std::find_if(status.items.begin(), status.items.end(),
                                    [&](const StatusItem& each) { return each.name == name; });
    return found == status.items.end() ? nullptr : &*found;
}

bool wrong(const LaneStatus& status, const std::string& name) {
    const StatusItem* item = find(status, name);
    return item != nullptr && !item->right();
}

double value_of(const PreflightItem& item, const char* name) {
    const auto found = item.values.find(name);
    return found == item.values.end() ? 0 : found->second;
}

// The largest difference between two sets of edges, in its standard errors.
struct Difference {
    std::string edge;
    double by = 0, standard_errors = 0;
    bool vertical = false;
    std::size_t compared = 0;
    bool gone = false;
};

Difference difference_of(const PairReadings& lane, double height_step, double width_step) {
    Difference out;
    const std::vector<EdgeStatistics> alone = edges_from(lane.alone->values);
    const std::vector<EdgeStatistics> together = edges_from(lane.together->values);
    out.gone = together.size() < alone.size();
    for (const EdgeStatistics& was : alone) {
        const auto is = std::find_if(together.begin(), together.end(),
                                     [&](const auto& edge) { return edge.name == was.name; });
        if (is == together.end()) continue;
        ++out.compared;
        const double step = was.vertical ? height_step : width_step;
        const double sigma = std::sqrt(std::min(was.variance(), is->variance()));
        // What a step hides does not average away, and may be hidden on either side.
        const double variance = was.variance() / static_cast<double>(was.count) +
                                is->variance() / static_cast<double>(is->count) +
                                2 * lasting_variance(step, sigma);
        const double by = is->mean - was.mean;
        const double errors = std::abs(by) / std::sqrt(std::max(variance, 1e-24));
        if (errors > out.standard_errors) {
            out.edge = was.name;
            out.by = by;
            out.standard_errors = errors;
            out.vertical = was.vertical;
        }
    }
    return out;
}

std::string text_of(const Difference& difference, Lane lane) {
    const std::string who = "lane " + std::to_string(number(lane)) + " ";
    if (difference.gone) return who + "loses its eye when both are read";
    return who + "moves by " +
           (difference.vertical ? fixed(difference.by, 2) + " mV"
                                : fixed(difference.by, 4) + " UI") +
           " (" + difference.edge + ", " + fixed(difference.standard_errors, 1) +
           " standard errors)";
}

}  // namespace

bool codes_may_mend(const LaneStatus& status) {
    return wrong(status, "lock") || wrong(status, "pattern_sync");
}

std::vector<PreflightItem> status_items(const BoardFile& board,
                                        const std::vector<LaneStatus>& lanes) {
    std::vector<PreflightItem> out;
    for (const StatusExpectation& expected : board.preflight.items) {
        PreflightItem item;
        item.name = expected.name;
        const RegisterDescription* reg = board.map.find(expected.field.reg);
        const bool per_lane = reg != nullptr && reg->per_lane;
        item.expected =
            expected.field.text() + " = " +
            (expected.equals_lane ? "the lane's number" : std::to_string(expected.equals));
        std::size_t looked_at = 0;
        for (const LaneStatus& lane : lanes) {
            const StatusItem* found = find(lane, expected.name);
            if (found == nullptr) continue;
            ++looked_at;
            if (found->right() || (!per_lane && !item.found.empty())) continue;
            item.found +=
                (item.found.empty() ? "" : ", ") + expected.field.text() + " is " +
                std::to_string(found->found) +
                (per_lane ? " on lane " + std::to_string(number(lane.lane)) : std::string());
        }
        if (looked_at == 0) {
            item.found = "not looked at: no lane is left to run";
        } else if (item.found.empty()) {
            item.result = ItemResult::passed;
            item.found = item.expected;
            if (per_lane) {
                item.found +=
                    " on " + std::to_string(looked_at) + (looked_at == 1 ? " lane" : " lanes");
            }
        } else {
            item.result = ItemResult::failed;
            item.advice = advice_for(expected.name);
        }
        out.push_back(std::move(item));
    }
    return out;
}

PreflightItem parallel_item(const PairReadings& one, const PairReadings& other, double height_step,
                            double width_step) {
    constexpr double both_tails = 0.001 / 2;
    PreflightItem item;
    item.name = item::parallel;
    item.settings = one.alone->settings;
    item.expected = "two lanes read the same alone and at the same time";
    const Difference first = difference_of(one, height_step, width_step);
    const Difference second = difference_of(other, height_step, width_step);
    const std::size_t compared = std::max<std::size_t>(first.compared + second.compared, 1);
    const double limit = normal_q(both_tails / static_cast<double>(compared));
    item.values["standard_errors"] = std::max(first.standard_errors, second.standard_errors);
    item.result = ItemResult::passed;
    const std::string lanes =
        "lanes " + std::to_string(number(one.lane)) + " and " + std::to_string(number(other.lane));
    item.found = lanes + " read the same alone and together, to within " +
                 fixed(std::max(first.standard_errors, second.standard_errors), 1) +
                 " standard errors";
    const auto differs = [limit](const Difference& d) {
        return d.gone || d.standard_errors > limit;
    };
    if (!differs(first) && !differs(second)) return item;
    item.result = ItemResult::noted;
    item.found = lanes + " read otherwise together than alone: ";
    if (differs(first)) item.found += text_of(first, one.lane);
    if (differs(second)) {
        item.found += (differs(first) ? ", " : "") + text_of(second, other.lane);
    }
    item.advice = "The run goes one lane at a time";
    return item;
}

namespace {

// What a latch hides inside its step never shows as a spread; and where no spread shows at all,
// that does not tell that there is no noise: then what the board file declares stands.
double told_sigma(double measured, double step, double declared) {
    const double hidden = step / std::sqrt(12.0);
    return std::max(measured > 0 ? measured : declared, hidden);
}

}  // namespace

std::optional<MonitorNoise> measured_noise(const RunState& state, const MonitorNoise& declared) {
    const PreflightItem* repeats = state.measured_item(item::repeatability);
    if (repeats == nullptr || repeats->result == ItemResult::failed) return std::nullopt;
    const double height = value_of(*repeats, "height_sigma_mv");
    const double width = value_of(*repeats, "width_sigma_ui");
    if (height <= 0 && width <= 0) return std::nullopt;
    MonitorNoise noise = declared;
    noise.height_sigma_mv = told_sigma(height, declared.height_step_mv, declared.height_sigma_mv);
    noise.width_sigma_ui = told_sigma(width, declared.width_step_ui, declared.width_sigma_ui);
    const PreflightItem* returns = state.measured_item(item::return_error);
    if (returns != nullptr && returns->result == ItemResult::passed) {
        noise.height_sigma_mv =
            std::hypot(noise.height_sigma_mv, value_of(*returns, "height_sigma_mv"));
        noise.width_sigma_ui =
            std::hypot(noise.width_sigma_ui, value_of(*returns, "width_sigma_ui"));
    }
    return noise;
}

Fault fault_of_items(const std::vector<PreflightItem>& failed, const std::string& board) {
    Fault fault;
    fault.cause = Cause::not_fit;
    fault.board = board;
    fault.what = "the preflight stopped the run: ";
    for (const PreflightItem& item : failed) {
        const bool first = &item == &failed.front();
        fault.what += (first ? "" : "; ") + item.name +
                      (item.lane ? " on lane " + std::to_string(number(*item.lane)) : "") +
                      ": found " + item.found + ", expected " + item.expected;
        if (item.advice.empty()) continue;
        if (fault.hint.find(item.advice) != std::string::npos) continue;
        fault.hint += (fault.hint.empty() ? "" : ". ") + item.advice;
    }
    return fault;
}

const std::vector<std::string>& board_items() {
    static const std::vector<std::string> names{item::repeatability, item::return_error,
                                                item::settle_time, item::parallel};
    return names;
}

}  // namespace lanewright
