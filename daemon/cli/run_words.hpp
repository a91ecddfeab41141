#pragma once
// Purpose:   words of the command line that every verb which begins a run takes: tags and lanes.
// Ownership: values only. Threads: the main thread.
// Errors:    UsageError says what was expected.

#include <cstdint>
#include <map>
#include <optional>
#include <stdexcept>
#include <string>
#include <vector>

#include "daemon/engine/recipe.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

// A word of the command line that cannot be used; exit 64, not a matter of the files.
class UsageError : public std::runtime_error {
  public:
    using std::runtime_error::runtime_error;
};

// KEY=VALUE each, every key once.
std::map<std::string, std::string> tags_of(const std::vector<std::string>& words);

// The lanes as typed, else the recipe's, else all of the board; ascending, and all on the board.
std::vector<std::uint16_t> lanes_of(const std::optional<std::string>& typed, const Recipe& recipe,
                                    const BoardFile& board);

}  // namespace lanewright
