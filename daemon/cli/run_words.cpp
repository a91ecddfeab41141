#include "daemon/cli/run_words.hpp"

#include <utility>

namespace lanewright {

std::map<std::string, std::string> tags_of(const std::vector<std::string>& words) {
    std::map<std::string, std::string> tags;
    for (const std::string& word : words) {
        const std::size_t equals = word.find('=');
        if (equals == std::string::npos || equals == 0) {
            throw UsageError("--tag " + word + ": expected KEY=VALUE, such as --tag chip=A7");
        }
        if (!tags.emplace(word.substr(0, equals), word.substr(equals + 1)).second) {
            throw UsageError("--tag " + word + ": this key is given twice");
        }
    }
    return tags;
}

std::vector<std::uint16_t> lanes_of(const std::optional<std::string>& typed, const Recipe& recipe,
                                    const BoardFile& board) {
    std::vector<std::uint16_t> lanes;
    if (typed) {
        std::string why;
        auto parsed = parse_lanes(*typed, why);
        if (!parsed) throw UsageError("--lanes \"" + *typed + "\": " + why);
        lanes = std::move(*parsed);
    } else if (recipe.lanes) {
        lanes = *recipe.lanes;
    } else {
        for (std::uint16_t lane = 0; lane < board.map.lane_count; ++lane) lanes.push_back(lane);
    }
    for (const std::uint16_t lane : lanes) {
        if (lane >= board.map.lane_count) {
            throw UsageError("lane " + std::to_string(lane) + ": board " + board.name +
                             " has lanes 0 to " + std::to_string(board.map.lane_count - 1));
        }
    }
    return lanes;
}

}  // namespace lanewright
