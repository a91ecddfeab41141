#pragma once
// Purpose:   all codes allowed for a lane: ranges, nominal tables, forbidden combinations.
// Ownership: values only; immutable after construction.
// Threads:   const access from any thread.

#include <cstdint>
#include <memory>
#include <optional>
#include <set>
#include <string>
#include <vector>

#include "adapt/values/values.hpp"

namespace lanewright {

// What a dimension switches in the equalizer; `other` joins the search without physics.
enum class Part : std::uint8_t {
    series_resistor,
    series_capacitor,
    shunt_resistor,
    shunt_capacitor,
    other
};

struct Dimension {
    std::string name;  // r1, c1, r2, c2, ...
    std::int32_t lowest = 0, highest = 0;
    Part part = Part::other;
    std::vector<double> nominal;  // ohm or farad by code, lowest first; empty: not known
};

// A combination that must never be written: holds when every listed dimension lies in its range.
struct Forbidden {
    struct Range {
        std::size_t dimension = 0;
        std::int32_t lowest = 0, highest = 0;
    };
    std::vector<Range> all_of;
    std::string why;
};

// Codes taken one by one: those left out of a space, or the only ones that are in it. Where a log
// stands in for a board, only what was read can be read.
struct CodeList {
    std::set<Codes> codes;
    bool only = false;
};

class CodeSpace {
  public:
    CodeSpace() = default;
    CodeSpace(std::vector<Dimension> dimensions, std::vector<Forbidden> forbidden,
              std::shared_ptr<const CodeList> list = {});

    const std::vector<Dimension>& dimensions() const { return dimensions_; }
    const std::vector<Forbidden>& forbidden() const { return forbidden_; }
    const std::shared_ptr<const CodeList>& list() const { return list_; }  // null: none

    // Right length, inside every range, no forbidden combination, and not ruled out by the list.
    bool allows(const Codes& codes) const;

    // Product of the ranges, forbidden combinations included.
    std::uint64_t size() const;

    // Position 0 .. size()-1, first dimension slowest; inverse of at(). Codes inside the ranges.
    std::uint64_t index_of(const Codes& codes) const;
    Codes at(std::uint64_t index) const;

    // Nominal element value, or empty where the table is unknown.
    std::optional<double> nominal(std::size_t dimension, std::int32_t code) const;

    // The index of the first dimension with that part, or empty.
    std::optional<std::size_t> find(Part part) const;

  private:
    std::vector<Dimension> dimensions_;
    std::vector<Forbidden> forbidden_;
    std::shared_ptr<const CodeList> list_;
};

}  // namespace lanewright
