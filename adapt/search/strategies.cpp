// The strategies a recipe may name: one line each.

#include <algorithm>
#include <array>

#include "adapt/search/descent.hpp"
#include "adapt/search/exhaustive.hpp"
#include "adapt/search/ladder.hpp"
#include "adapt/search/procedure.hpp"

namespace lanewright {
namespace {

constexpr std::array entries = {
    StrategyEntry{"descent", "coordinate descent on the codes", make_descent},
    StrategyEntry{"descent_axes", "coordinate descent on the response", make_descent_axes},
    StrategyEntry{"exhaustive", "every code, or every stride-th", make_exhaustive},
    StrategyEntry{"ladder", "16 codes ordered by peaking, then single steps", make_ladder},
};

}  // namespace

std::span<const StrategyEntry> strategies() {
    return entries;
}

const StrategyEntry* find_strategy(std::string_view name) {
    const auto found = std::find_if(entries.begin(), entries.end(),
                                    [&](const StrategyEntry& each) { return each.name == name; });
    return found == entries.end() ? nullptr : &*found;
}

}  // namespace lanewright
