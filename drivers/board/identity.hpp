#pragma once
// Purpose:   what the board says it is, and whether that is what the board file expects.
// Ownership: copies what it needs; refers to the RegisterMap, which must outlive it.
// Threads:   immutable after construction.

#include <vector>

#include "drivers/board/lane_reader.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/registers/register_map.hpp"

namespace lanewright {

class IdentityCheck {
  public:
    IdentityCheck(const RegisterMap& map, IdentityDescription description);

    // Reads every identity field. Cause::not_allowed for a field that cannot be read.
    Result<Batch> batch() const;

    // The values in a reply to batch(). Cause::wrong_board with what was found and expected.
    Result<Identity> identity(const BatchReply& reply) const;

  private:
    const RegisterMap* map_;
    IdentityDescription description_;
    std::vector<FieldName> fields_;  // in the order of the batch
};

}  // namespace lanewright
