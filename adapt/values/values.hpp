#pragma once
// Purpose:   the plain values that cross every seam: lanes, codes, looks, counts, readings.
// Ownership: values only; each object owns all it holds.
// Threads:   no shared state; copy freely.
// Units are the last word of a name (_mv, _ui, _s). All types are default-constructible.

#include <compare>
#include <cstdint>
#include <optional>
#include <string>
#include <variant>
#include <vector>

namespace lanewright {

enum class Lane : std::uint16_t {};
enum class Condition : std::uint16_t {};  // a corner; 0 = "as found"

constexpr std::uint16_t number(Lane lane) {
    return static_cast<std::uint16_t>(lane);
}

// One value for every tuned dimension, in the order of the board file's dimensions.
struct Codes {
    std::vector<std::int32_t> value;
    auto operator<=>(const Codes&) const = default;
};

// One dwell of the monitor at one phase and voltage offset from the data sampler's decision point.
struct Look {
    double phase_ui = 0;
    double offset_mv = 0;
    std::uint64_t bits = 0;
    bool operator==(const Look&) const = default;
};

struct Count {
    Look look;
    std::uint64_t errors = 0;
    bool saturated = false;  // the counter stopped at its top: `errors` is a lower limit
    bool operator==(const Count&) const = default;
};

// What is known of a measured value: the value itself, or only that it lies at or below/above.
enum class Bound : std::uint8_t { exact, at_most, at_least };

struct Measured {
    double value = 0;
    double std_error = 0;  // one standard deviation, same unit as value
    Bound bound = Bound::exact;
    bool operator==(const Measured&) const = default;
};

enum class Status : std::uint8_t {
    open,         // all edges found
    closed,       // no opening at the error ratio asked for
    no_lock,      // the receiver did not lock with these codes
    saturated,    // the eye reaches beyond the monitor's range in at least one direction
    void_reading  // not a measurement (reset, lost link): never handed to a strategy
};

// What the monitor compares with. Under `decision`, counts at zero offset prove nothing. `unknown`
// only where margins were logged by other means and nobody can say.
enum class ErrorDefinition : std::uint8_t { pattern, decision, unknown };

// Whether a margin was read at the error ratio stated or extrapolated to it.
enum class Basis : std::uint8_t { counted, extrapolated };

// Where the edges of an eye are expected, from a model or an earlier reading; 0: not known. A
// counting monitor starts looking there.
struct Expected {
    double up_mv = 0, down_mv = 0, left_ui = 0, right_ui = 0;
    bool operator==(const Expected&) const = default;
};

struct MarginWanted {
    double error_ratio = 0;
    std::uint64_t dwell_bits = 0;  // of the whole reading: a counting monitor shares it out
    Expected expected = {};        // counting monitors only
    bool operator==(const MarginWanted&) const = default;
};

struct LooksWanted {
    std::vector<Look> looks;
    bool operator==(const LooksWanted&) const = default;
};

struct Request {
    Codes codes;
    Condition condition{};
    std::variant<MarginWanted, LooksWanted> what;
    std::string why;    // for people and the log; takes no part in comparison of proposals
    double wait_s = 0;  // between the codes and the measurement, on top of what the board declares
};

// By how much each edge moves inwards for one more unit of the normal deviate Q of the error ratio
// (error ratio = half of erfc(Q / root 2)), from counts at two error ratios. Bound at_least: not
// told.
struct EdgeSlopes {
    Measured up_mv, down_mv, left_ui, right_ui;
    bool operator==(const EdgeSlopes&) const = default;
};

// What the board told beside the margin, under the board file's names (die_temperature_c, ...).
struct Telemetry {
    std::string name;
    double value = 0;
    bool operator==(const Telemetry&) const = default;
};

// The margin of one lane at one set of codes: four distances from the data sampler's decision
// point to the edges. A monitor that tells only height and width fills those two and sets
// `centred_assumed`; the four are then absent.
struct Reading {
    Codes codes;  // as read back, not as asked for
    Condition condition{};
    Status status = Status::void_reading;
    std::optional<Measured> up_mv, down_mv, left_ui, right_ui;
    std::optional<Measured> height_mv, width_ui;  // only where the four are not told apart
    bool centred_assumed = false;
    Basis basis = Basis::counted;
    ErrorDefinition error_definition = ErrorDefinition::pattern;
    double error_ratio = 0;                    // the ratio at which the edges are stated
    std::optional<double> centre_error_ratio;  // of a closed eye, where the monitor counts
    std::optional<EdgeSlopes> slopes;          // of a counting monitor
    std::vector<Count> counts;                 // raw, where the board has them
    std::vector<Telemetry> telemetry;
    std::uint64_t bit_count = 0;  // bits dwelt on in all
    double cost_s = 0;            // declared cost, not measured time
};

// The margin a lane must have; a score of 1.0 just passes.
struct Required {
    double error_ratio = 1e-6;
    double height_mv = 0;
    double width_ui = 0;
    bool operator==(const Required&) const = default;
};

}  // namespace lanewright
