#pragma once
// Purpose:   the board's registers: addresses, access rules, reset values; it packs fields itself.
// Ownership: keeps what it needs of the map and of the binding; refers to the Hardware behind it.
// Threads:   one at a time.

#include <cstdint>
#include <map>
#include <optional>
#include <vector>

#include "sim_target/board/board_side.hpp"

namespace lanewright::sim {

// What stands behind fields that play a part.
class Hardware {
  public:
    virtual ~Hardware() = default;
    // The present value of a field that the chip makes: all but codes, settings and fixed values.
    virtual std::uint32_t status(std::uint16_t lane, Part part) = 0;
    // A one was written to a strobe, trigger or count.
    virtual void started(std::uint16_t lane, Part part) = 0;
    // A bank code, or a reading's number, was written.
    virtual void written(std::uint16_t lane, Part part) = 0;
};

class RegisterFile {
  public:
    RegisterFile(const RegisterMapDescription& map, const Binding& binding,
                 const std::map<FieldName, std::uint32_t>& overrides,
                 const std::vector<int>& reset_codes, Hardware& hardware);

    // Everything to its reset value. The hardware is not told.
    void reset();

    Outcome read(std::uint32_t address, std::uint32_t& value);
    // Bits outside the mask, and bits that cannot be written, stay.
    Outcome write(std::uint32_t address, std::optional<std::uint32_t> mask, std::uint32_t value);
    // All bits of the register; 0 where there is none.
    std::uint32_t all_bits(std::uint32_t address) const;

    // The stored value of the field that plays this part; empty where none does.
    std::optional<std::uint32_t> stored(std::uint16_t lane, Part part) const;
    // The most that this field holds; 0 where none plays the part.
    std::uint32_t top(std::uint16_t lane, Part part) const;
    // Something else writes the field: no access rule, and the hardware is not told.
    void overwrite(std::uint16_t lane, Part part, std::uint32_t value);
    // The lane whose register it is; empty for one of the board, and where there is none.
    std::optional<std::uint16_t> lane_of(std::uint32_t address) const;

  private:
    struct Field {
        unsigned low_bit = 0;
        std::uint32_t mask = 0;  // in place
        Access access = Access::read_only;
        Part part = Part::none;
        std::uint32_t reset = 0;
    };
    struct Register {
        std::uint16_t lane = 0;
        bool per_lane = false;
        std::uint32_t all = 0;
        bool readable = false, writable = false;
        std::uint32_t value = 0;
        std::vector<Field> fields;
    };
    Register make_register(const RegisterDescription& from, std::uint16_t lane,
                           const Binding& binding,
                           const std::map<FieldName, std::uint32_t>& overrides,
                           const std::vector<int>& reset_codes) const;
    std::uint32_t present_value(const Register& reg, const Field& field);
    const Field* find(std::uint16_t lane, Part part, const Register** reg) const;

    Hardware& hardware_;
    std::map<std::uint32_t, Register> registers_;
    std::map<std::pair<std::uint16_t, Part>, std::uint32_t> address_of_part_;
};

}  // namespace lanewright::sim
