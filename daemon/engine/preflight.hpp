#pragma once
// Purpose:   what the preflight concludes from status registers, from readings of two lanes, and
//            from what it has measured: items, noise, and the fault that stops a run.
// Ownership: pure functions on values.
// Threads:   any.

#include <optional>
#include <string>
#include <vector>

#include "daemon/engine/run_state.hpp"
#include "drivers/board/lane_reader.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

// A lane's status as it was read last.
struct LaneStatus {
    Lane lane{};
    std::vector<StatusItem> items;
};

// Whether other codes could mend what is wrong: a closed eye has no lock, and without lock the
// pattern checker is out of sync.
bool codes_may_mend(const LaneStatus& status);

// One item a name, over all lanes, in the order in which the board file states them.
std::vector<PreflightItem> status_items(const BoardFile& board,
                                        const std::vector<LaneStatus>& lanes);

// The two lanes' readings alone against those taken at the same time: `noted` where they differ
// (99.9 %, all edges of both lanes taken together), and the run goes one lane at a time.
struct PairReadings {
    Lane lane{};
    const PreflightItem* alone = nullptr;
    const PreflightItem* together = nullptr;
};
PreflightItem parallel_item(const PairReadings& one, const PairReadings& other, double height_step,
                            double width_step);

// Repeatability and return error as the noise of one edge; empty where no repeatability was
// measured. `declared` lends its steps.
std::optional<MonitorNoise> measured_noise(const RunState& state, const MonitorNoise& declared);

// All failed items in one fault with Cause::not_fit.
Fault fault_of_items(const std::vector<PreflightItem>& failed, const std::string& board);

// Items that hold for the board and need not be measured in every run.
const std::vector<std::string>& board_items();

}  // namespace lanewright
