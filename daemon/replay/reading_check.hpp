#pragma once
// Purpose:   one stored reading held against its own wire record: the record is given to the same
//            code that made the reading, and the outcome compared with what is stored.
// Ownership: refers to board, map and time source for its life.
// Threads:   one caller at a time.

#include <optional>
#include <string>

#include "daemon/replay/stored_registers.hpp"
#include "daemon/store/events.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright {

struct ReadingDifference {
    std::optional<std::size_t> operation;
    std::string reg, what, expected, found;
};

// The first value in which two readings differ, as "up_mv value" and the two as text; empty: none.
struct ValueDifference {
    std::string name, one, other;
};
std::optional<ValueDifference> first_difference(const Reading& one, const Reading& other);

class ReadingCheck {
  public:
    // `resets`: as many as the run may have met, at most.
    ReadingCheck(BoardFile board, const RegisterMap& map, TimeSource& time, std::size_t resets);

    // Empty: the record gives the stored reading. `standing`: the codes on the chip before it.
    std::optional<ReadingDifference> check(const Request& request, const ReadingTaken& taken,
                                           const std::optional<Codes>& standing);

  private:
    struct Derived {
        Result<LaneReading> reading = Fault{};
        std::optional<WireDifference> difference;
        std::size_t used = 0;
    };
    Derived derive(const Request& request, const ReadingTaken& taken,
                   std::vector<WireOperation> record, const std::optional<Codes>& standing);
    std::optional<ReadingDifference> blame(const Request& request, const ReadingTaken& taken,
                                           const Reading& derived, const ValueDifference& value,
                                           const std::optional<Codes>& standing);
    bool explains(const Request& request, const ReadingTaken& taken,
                  const std::optional<Codes>& standing, std::size_t operation,
                  std::uint32_t result);

    std::optional<SentinelRecord> sentinel_of(Lane lane) const;

    BoardFile board_;  // without its sentinel
    const RegisterMap& map_;
    TimeSource& time_;
    std::optional<FieldName> sentinel_;
    std::set<std::uint32_t> planted_;  // in the field's own units
};

}  // namespace lanewright
