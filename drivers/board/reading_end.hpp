#pragma once
// Purpose:   what is read at the end of every reading, whatever the monitor: the codes once more,
//            the sentinel, and the telemetry that the board file names.
// Ownership: refers to the board file and the register map, which must outlive it.
// Threads:   no shared state.

#include <cstdint>
#include <optional>
#include <vector>

#include "adapt/values/values.hpp"
#include "drivers/board/sentinel.hpp"
#include "drivers/board/sequences.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/registers/register_map.hpp"

namespace lanewright {

class ReadingEnd {
  public:
    // To be made when the reading begins: it remembers the sentinel that stands then.
    ReadingEnd(const BoardFile& board, const RegisterMap& map, const Sentinel& sentinel, Lane lane)
        : board_(&board),
          map_(&map),
          lane_(lane),
          generation_(sentinel.generation()),
          sentinel_value_(sentinel.value()) {}

    // Adds the reads to the end of a batch; of several batches the last counts.
    Result<void> add(Compiled& compiled);

    // Cause::codes_changed, naming the register, where a code is not as it was read back before.
    // Codes that cannot be read are passed over.
    Result<void> check_codes(const Compiled& compiled, const BatchReply& reply,
                             const Codes& written) const;

    // Cause::board_reset where the sentinel is not what stood when the reading began.
    Result<void> check_sentinel(const Compiled& compiled, const BatchReply& reply) const;
    std::uint64_t generation() const { return generation_; }

    std::vector<Telemetry> telemetry(const Compiled& compiled, const BatchReply& reply) const;

  private:
    const BoardFile* board_;
    const RegisterMap* map_;
    Lane lane_;
    std::uint64_t generation_;
    std::uint32_t sentinel_value_;
    std::vector<std::optional<std::size_t>> codes_;  // by dimension
    std::optional<std::size_t> sentinel_;
    std::vector<std::size_t> telemetry_;  // in the board file's order
};

}  // namespace lanewright
