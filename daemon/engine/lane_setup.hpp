#pragma once
// Purpose:   from a board file and a recipe to what each lane's job needs.
// Ownership: values only.
// Threads:   no shared state.

#include "adapt/search/code_space.hpp"
#include "daemon/engine/lane_machine.hpp"
#include "daemon/engine/recipe.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

// All the board's dimensions, in its order, with limits, tables and forbidden combinations.
CodeSpace code_space_of(const BoardFile& board);

CostModel cost_model_of(const BoardFile& board);
MonitorNoise monitor_noise_of(const BoardFile& board);

PreflightSetup preflight_setup_of(const BoardFile& board);
bool counts(const BoardFile& board);  // the monitor counts where it is told to look

// Bits of one dwell of the recipe on that board: the recipe's seconds at the board's bit rate,
// rounded up to a power of two where the monitor takes its dwell as one.
std::uint64_t dwell_bits_of(const BoardFile& board, const Recipe& recipe);

// The strategy must be a known one (check_recipe_against_board sees to that).
LaneSetup lane_setup_of(const BoardFile& board, const Recipe& recipe, Lane lane,
                        std::uint64_t seed);

// Lanes that run together. All of them at once for strategies that teach nothing.
std::vector<std::vector<std::uint16_t>> waves_of(const std::vector<std::uint16_t>& lanes);

}  // namespace lanewright
