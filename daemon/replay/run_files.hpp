#pragma once
// Purpose:   the board file and the recipe of a stored run, decoded again from its manifest.
// Ownership: values only.
// Threads:   no shared state.
// Errors:    BadStoreData where the copies can no longer be read, or are not what was stored.

#include "daemon/engine/recipe.hpp"
#include "daemon/store/manifest.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

struct RunFiles {
    BoardFile board;
    Recipe recipe;  // of an imported run: a name, and nothing required
};

// An imported run without a board file has one made of its column map: dimensions, noise and costs,
// but no link, registers or sequences that could be used on a board.
RunFiles files_of(const Manifest& manifest);

}  // namespace lanewright
