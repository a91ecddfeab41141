#pragma once
// Purpose:   the link that a board file, or the command line, describes.
// Ownership: the caller owns the link; it refers to the TimeSource.
// Threads:   io thread.

#include <memory>

#include "drivers/config/board_file.hpp"
#include "drivers/io/link.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright {

// Not opened yet; never fails.
std::unique_ptr<Link> make_link(TimeSource& time, const LinkDescription& description);

}  // namespace lanewright
