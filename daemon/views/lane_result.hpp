#pragma once
// Purpose:   what a run found for each lane: the one account that tables, JSON and reports share.
// Ownership: values only.
// Threads:   no shared state.

#include <optional>
#include <string>
#include <vector>

#include "adapt/search/response.hpp"
#include "adapt/search/score.hpp"
#include "adapt/search/verdict.hpp"
#include "daemon/engine/recipe.hpp"
#include "daemon/engine/run_state.hpp"
#include "daemon/store/database.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

// A run with its files decoded again from the manifest.
struct RunView {
    Manifest manifest;
    BoardFile board;
    Recipe recipe;
    CodeSpace space;
    RunState state;
    bool running = false;  // the process that works on it has the store open
};

// Throws StoreError where the manifest's files can no longer be read.
RunView view_of(const RunRow& row, const Database& database);

struct Margin {
    Reading reading;  // the mean of the fresh readings
    Score score;
};

// What the tolerance of the monitor's step calibration may add to or take from a margin, the same
// way in every reading: no number of readings averages it away, and no standard error holds it.
struct Systematic {
    std::optional<double> height_mv, width_ui;  // to either side; empty: nothing measured
};
Systematic systematic_of(const BoardFile& board, const Reading& reading);

struct LaneResult {
    std::uint16_t lane = 0;
    std::optional<LaneOutcome> outcome;  // empty: not finished
    std::optional<Settlement> left;      // what stands on the chip since; empty: not settled
    std::optional<Judgement> judgement;  // of `after`; empty: failed or not there yet
    std::optional<Codes> former, decided;
    std::optional<Margin> before, after;  // fresh readings only
    std::optional<Response> response;     // of the decided codes, nominal tables
    std::size_t reading_count = 0;        // all that count, the side ones included
    std::size_t side_reading_count = 0;   // of the preflight and of the reference
    std::uint32_t void_count = 0;
    std::uint64_t bit_count = 0;
    double bench_s = 0, side_bench_s = 0;
    std::string reason;
    std::vector<std::string> notes;
};

LaneResult lane_result(const RunView& view, std::uint16_t lane);
std::vector<LaneResult> lane_results(const RunView& view);

// complete, stopped, wall_limit, fault, running or interrupted.
std::string run_status(const RunView& view);

// All lanes of a complete run meet.
bool all_meet(const RunView& view);

}  // namespace lanewright
