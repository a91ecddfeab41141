#pragma once
// Purpose:   the registers of one board: where each field lies, who may write it and what, and
//            the only maker of write requests.
// Ownership: keeps copies of what it needs of the board file.
// Threads:   immutable after construction; const access from any thread.
// Errors:    Cause::not_allowed for whatever the board file does not allow, naming the field and
//            its limits; the batch is then left as it was.

#include <chrono>
#include <cstdint>
#include <map>
#include <optional>
#include <set>
#include <string>
#include <vector>

#include "drivers/config/board_file.hpp"
#include "drivers/config/register_description.hpp"
#include "drivers/faults/fault.hpp"
#include "drivers/registers/batch.hpp"

namespace lanewright {

// Where a field of one lane lies.
struct FieldPlace {
    std::uint32_t address = 0;  // absolute
    std::uint32_t mask = 0;     // in place
    unsigned shift = 0;
    unsigned width_bits = 32;  // of the register
    std::uint32_t value_in(std::uint32_t whole_register) const {
        return (whole_register & mask) >> shift;
    }
};

class RegisterMap {
  public:
    explicit RegisterMap(const BoardFile& board);

    std::uint16_t lane_count() const { return description_.lane_count; }

    // Fails for an unknown field, and for a lane that the board lacks where the register is per
    // lane; for a board-wide register the lane does not matter.
    Result<FieldPlace> place(Lane lane, const FieldName& name) const;

    // The field's description; empty where the map lacks it.
    const FieldDescription* find(const FieldName& name) const { return description_.find(name); }

    // The operations below are added to the end of `batch`. Values are in the field's own units.

    Result<void> read(Batch& batch, Lane lane, const FieldName& name) const;

    // Every tuned dimension, one write each with read-back. Refused outside the limits and for a
    // forbidden combination. The order is the board file's; on a chip without a strobe, where
    // each write takes effect at once, it is one that passes no forbidden combination on the way
    // from `standing`, which is then needed.
    Result<void> write_codes(Batch& batch, Lane lane, const Codes& wanted,
                             const std::optional<Codes>& standing) const;

    // A control field that one of the board file's sequences writes, or a scratch field.
    Result<void> write_declared(Batch& batch, Lane lane, const FieldName& name,
                                std::uint32_t value) const;

    // The same, joined to the batch's last write where that is to other bits of the same register
    // and both are read back: one write then puts both fields.
    Result<void> write_joined(Batch& batch, Lane lane, const FieldName& name,
                              std::uint32_t value) const;

    Result<void> wait_until(Batch& batch, Lane lane, const FieldName& name, std::uint32_t value,
                            std::chrono::microseconds timeout) const;

    Result<void> pause(Batch& batch, std::chrono::microseconds time) const;

    // Operations `first` to `first + count - 1` of a batch that is too long for its dialect.
    // Taken as not repeatable where the whole is not and the part writes without read-back.
    static Batch part_of(const Batch& batch, std::size_t first, std::size_t count);

    // Limits and forbidden combinations of a whole set of codes.
    Result<void> check_codes(Lane lane, const Codes& codes) const;

    // Whether the codes take effect together; else write_codes needs those that stand.
    bool has_strobe() const { return strobe_; }

    // Success when everything was carried out and every read-back is as written. Else the
    // operation that ended the batch, by its register and field: Cause::not_accepted,
    // wait_expired or refused.
    Result<void> check_reply(const Batch& batch, const BatchReply& reply) const;

    // "EQ_R1.code", the register's name where the mask is no single field, or the address.
    std::string name_at(std::uint32_t address, std::uint32_t mask) const;
    std::optional<Lane> lane_at(std::uint32_t address) const;  // empty for a board-wide register

  private:
    struct Owner {
        std::size_t reg = 0;
        std::optional<Lane> lane;
    };
    struct Range {
        std::size_t dimension = 0;
        std::int32_t lowest = 0, highest = 0;
    };
    struct Combination {
        std::vector<Range> all_of;
        std::string why;
    };

    void note_addresses();
    void note_declared(const Sequence& sequence);
    void note_forbidden(const BoardFile& board);
    const Combination* forbidding(const std::vector<std::int32_t>& codes) const;
    Result<std::vector<std::size_t>> order_of_writes(Lane lane, const Codes& standing,
                                                     const Codes& wanted) const;
    void add_write(Batch& batch, const FieldPlace& place, const FieldDescription& field,
                   std::uint32_t value) const;
    Result<void> check_limits(Lane lane, const FieldName& name, const FieldDescription& field,
                              std::int64_t value) const;
    Fault fault_at(const Operation& operation, std::optional<std::uint32_t> result,
                   Outcome outcome) const;

    RegisterMapDescription description_;
    std::vector<FieldName> dimensions_;
    std::vector<std::string> dimension_names_;
    std::vector<Combination> forbidden_;
    std::set<FieldName> declared_;
    std::map<std::uint32_t, Owner> owner_of_address_;
    bool strobe_ = true;
};

// A fault of Cause::not_allowed.
Fault not_allowed(std::string what, std::string reg, std::optional<Lane> lane);

}  // namespace lanewright
