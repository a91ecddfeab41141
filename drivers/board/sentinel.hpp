#pragma once
// Purpose:   knows a reset by a value that it clears: which value stands in the board file's
//            sentinel field, and who was told that it fell. Needed where the dialect does not tell
//            a reset.
// Ownership: values only.
// Threads:   none of its own; its reader's.
//
// Each generation has a value of its own: a lane whose reading began before a reset doesn't take
// the value that another lane has written since for its own.

#include <cstdint>
#include <map>
#include <optional>
#include <set>

#include "adapt/values/values.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

class Sentinel {
  public:
    explicit Sentinel(const BoardFile& board);

    const std::optional<FieldName>& field() const { return field_; }
    bool declared() const { return field_.has_value(); }

    // What is to stand in the field. Never 0, never the field's reset value, and another one than
    // in the generation before.
    std::uint32_t value() const;
    std::uint64_t generation() const { return generation_; }

    // Whether it was written for that lane in this generation; one of another generation is none.
    bool stands(Lane lane) const { return standing_.contains(key(lane)); }
    void written(Lane lane, std::uint64_t generation) {
        if (generation == generation_) standing_.insert(key(lane));
    }

    // A lane that began in `generation` found another value: a reset, unless it is known already.
    void found_fallen(std::uint64_t generation);
    // The dialect has told of a reset, and tells the lanes.
    void told_by_dialect(std::uint64_t resets);

    // Resets that only the sentinel showed.
    std::uint64_t resets() const { return resets_; }
    // True once a lane after each of them.
    bool must_be_told(Lane lane);

  private:
    // One field for the board, or one a lane.
    Lane key(Lane lane) const { return per_lane_ ? lane : Lane{0}; }
    void fall();

    std::optional<FieldName> field_;
    std::uint32_t ones_ = 0, reset_value_ = 0;
    bool per_lane_ = false;
    std::uint64_t generation_ = 0, resets_ = 0, resets_of_dialect_ = 0;
    std::set<Lane> standing_;
    std::map<Lane, std::uint64_t> told_;
};

}  // namespace lanewright
