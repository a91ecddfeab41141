#pragma once
// Purpose:   what to tune, for which margin, with which strategy and budget, how to verify: the
//            user's recipe file, and the checks of a recipe against the board it is meant for.
// Ownership: values only; the file's full text is kept for the manifest.
// Threads:   no shared state; const access from any thread.
// Errors:    every complaint of a file at once, with line and column; a file with complaints gives
//            no recipe.

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "adapt/values/values.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/config/json_reader.hpp"

namespace lanewright {

struct StrategyChoice {
    std::string name;
    std::uint32_t stride = 1;     // exhaustive: every stride-th code of each dimension
    bool allow_unchanged = true;  // keep the present codes when nothing is significantly better
};

// Per lane; 0: no limit.
struct BudgetChoice {
    double standard_readings = 0;
    double bench_s = 0;
};

enum class Afterwards : std::uint8_t { leave, restore };

struct Recipe {
    std::string path, source;  // where it was read, and its full text
    std::string name, description;
    std::optional<std::vector<std::uint16_t>> lanes;  // ascending; absent: all
    std::vector<std::string> dimensions;
    Required required;
    double search_error_ratio = 1e-6;
    StrategyChoice strategy;
    BudgetChoice budget;
    double dwell_s = 0.1;  // of one look
    std::uint32_t verify_rounds = 1;
    Afterwards afterwards = Afterwards::leave;
    double wall_limit_s = 0;  // 0: none
    std::vector<std::string> required_tags;
    bool accept_extrapolated = false;
    std::optional<std::uint64_t> seed;
    std::map<std::string, Place> places;  // of every value, by JSON pointer, for later complaints
};

// Empty if there was any complaint about the file.
std::optional<Recipe> load_recipe(const std::string& path, Complaints& complaints);
// `complaints` is the one the document was parsed with.
std::optional<Recipe> decode_recipe(const Document& document, Complaints& complaints);

// Whether the board can do what the recipe asks: lanes, dimensions, strategy, error ratios, range
// and dwell of the monitor. Complaints name the place in the recipe; none: it can.
void check_recipe_against_board(const Recipe& recipe, const BoardFile& board,
                                const std::vector<std::string_view>& strategy_names,
                                Complaints& complaints);

// Only what a log must be able to answer: dimensions and strategy. What a monitor could be told
// does not matter where nothing is measured.
void check_recipe_for_replay(const Recipe& recipe, const BoardFile& board,
                             const std::vector<std::string_view>& strategy_names,
                             Complaints& complaints);

// "0,2-5" as lane numbers, ascending. On failure: empty, and `why` says what was expected.
std::optional<std::vector<std::uint16_t>> parse_lanes(std::string_view text, std::string& why);

}  // namespace lanewright
