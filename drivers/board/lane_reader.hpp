#pragma once
// Purpose:   the seam between the engine and whatever measures: a board, a log, a benchmark.
// Ownership: an implementation owns or refers to its board; values go in and out by value.
// Threads:   called on the io thread; several lanes may have calls in flight at once, one a lane.
// Errors:    a Fault names board, lane, register, attempt and what to do.

#include <cstdint>
#include <string>
#include <vector>

#include "adapt/values/values.hpp"
#include "drivers/config/register_description.hpp"
#include "drivers/faults/fault.hpp"
#include "drivers/io/task.hpp"

namespace lanewright {

struct IdentityValue {
    std::string name;
    std::uint32_t value = 0;
    bool operator==(const IdentityValue&) const = default;
};

struct Identity {
    std::vector<IdentityValue> values;  // expected ones first, then the reported ones
    bool simulated = false;             // false where the board file declares no such field
    bool operator==(const Identity&) const = default;
};

// One register operation as it was carried out: the wire record of a reading.
struct WireOperation {
    enum class Kind : std::uint8_t { read, write, wait_until, pause };
    Kind kind = Kind::read;
    std::uint32_t address = 0;
    std::uint32_t mask = 0;    // in place
    std::uint32_t value = 0;   // in place: written, waited for, or microseconds of a pause
    std::uint32_t result = 0;  // in place: read, read back, or seen when the wait ended
    bool read_back = false;    // of a write: `result` is meaningful
    bool expired = false;      // of a wait: it ended without its condition
    bool operator==(const WireOperation&) const = default;
};

struct SavedField {
    FieldName field;
    std::uint32_t address = 0, mask = 0;    // in place
    std::uint32_t value = 0;                // in the field's own units
    std::uint32_t lowest = 0, highest = 0;  // limits, in the field's own units
    Role role = Role::none;
    std::string dimension;  // of a tuned field: r1, ...
    bool operator==(const SavedField&) const = default;
};

struct SavedLane {
    Lane lane{};
    std::vector<SavedField> fields;  // in the order in which they are restored
    bool operator==(const SavedLane&) const = default;
};

struct Applied {
    Codes codes;  // as read back
    bool locked = true;
    std::vector<WireOperation> wire;
};

// One item of a lane's status, as the board file expects it.
struct StatusItem {
    std::string name;  // as StatusExpectation has it
    FieldName field;
    std::uint32_t found = 0, expected = 0;
    bool right() const { return found == expected; }
    bool operator==(const StatusItem&) const = default;
};

struct LaneReading {
    Reading reading;
    std::vector<WireOperation> wire;
};

class LaneReader {
  public:
    virtual ~LaneReader() = default;

    // Reads the identity; Cause::wrong_board where it is not what the board file expects.
    virtual Task<Identity> identify() = 0;

    // The present value of everything a run may write on that lane.
    virtual Task<SavedLane> save(Lane lane) = 0;

    // The codes that stand in the registers.
    virtual Task<Codes> codes(Lane lane) = 0;

    // The `apply` sequence with these codes; succeeds only if they read back as written.
    virtual Task<Applied> apply(Lane lane, Codes codes) = 0;

    // Puts the request's codes and takes one margin reading, in one go. `ordinal` is the reading's
    // number within its lane; the same ordinal names the same reading when it is taken again.
    // Cause::board_reset or outcome_unknown: no reading was taken that counts; bring_up, then anew.
    // codes_changed: a code was as written and no longer is at the end; `reg` names it.
    virtual Task<LaneReading> read(Lane lane, Request request, std::uint32_t ordinal) = 0;

    // Writes the saved values in their order, through the apply sequence for the tuned ones, and
    // reads them back.
    virtual Task<Codes> restore(Lane lane, SavedLane saved) = 0;

    // The board file's `bring_up` sequence, after a reset.
    virtual Task<void> bring_up(Lane lane) = 0;

    // The lane's status items, read in one batch; none where nothing is expected of them.
    virtual Task<std::vector<StatusItem>> status(Lane) {
        std::vector<StatusItem> none;
        co_return none;
    }
};

}  // namespace lanewright
