#pragma once
// Purpose:   a board that is a record: answers each register operation from the wire record of one
//            stored reading, and stops at the first that is not the recorded one.
// Ownership: owns its record; refers to the RegisterMap.
// Threads:   one caller at a time.

#include <optional>
#include <set>
#include <string>
#include <vector>

#include "drivers/board/lane_reader.hpp"
#include "drivers/board/registers.hpp"
#include "drivers/registers/register_map.hpp"

namespace lanewright {

// Where a record and the program part.
struct WireDifference {
    std::size_t operation = 0;  // number in the record, from 0
    std::string reg;            // register, or register.field
    std::string expected;       // of the program
    std::string found;          // in the record
};

// The operations that only watch for a reset. Which value a session has planted, and in which
// reading, depends on what other lanes met; they are therefore checked by themselves.
struct SentinelRecord {
    std::uint32_t address = 0, mask = 0;  // in place
    std::set<std::uint32_t> values;       // in place: all that a session plants
};

class StoredRegisters final : public Registers {
  public:
    // `standing`: the codes' registers before the reading, for a chip that takes each code as it
    // is written and is therefore asked for them first, outside the record.
    StoredRegisters(const RegisterMap& map, std::vector<WireOperation> record,
                    std::optional<Codes> standing, std::vector<FieldName> dimensions,
                    std::optional<SentinelRecord> sentinel);

    // Passes what is left of the record where that only watches for a reset.
    void end();

    // Cause::diverged at the first operation that is not the recorded one; difference() has it.
    Task<BatchReply> run(Lane lane, Batch batch, TimePoint deadline) override;

    // A record does not tell how a dialect had cut it into batches, so that nothing is cut here.
    bool fits(const Batch& batch, std::string& why) const override;
    std::chrono::nanoseconds longest(const Batch& batch) const override;

    const std::optional<WireDifference>& difference() const { return difference_; }
    // Operations of the record answered so far; the number of the next one.
    std::size_t used() const { return next_; }
    std::size_t size() const { return record_.size(); }

  private:
    bool pass_sentinel(const WireOperation* wanted);
    std::optional<BatchReply> standing_codes(Lane lane, const Batch& batch) const;
    bool answer(const Operation& operation, BatchReply& reply, std::size_t index);
    Fault differs(std::string reg, std::string expected, std::string found);

    const RegisterMap& map_;
    std::vector<WireOperation> record_;
    std::optional<Codes> standing_;
    std::vector<FieldName> dimensions_;
    std::optional<SentinelRecord> sentinel_;
    std::optional<std::uint32_t> planted_;
    std::size_t next_ = 0;
    std::optional<WireDifference> difference_;
};

// "write EQ_R1.code 0x5 (mask 0x1F)", for people.
std::string described(const RegisterMap& map, const WireOperation& operation);

}  // namespace lanewright
