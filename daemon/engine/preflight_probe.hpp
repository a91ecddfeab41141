#pragma once
// Purpose:   the measured items of the preflight, one procedure each: is the monitor sane, how well
//            does it repeat itself, what do leaving a code and coming back do, how long until it
//            stands still, and does another lane disturb it?
// Ownership: a Probe refers to the space of its problem, which must outlive it; values otherwise.
// Threads:   one caller at a time; no clock, no I/O: the same readings give the same item.

#include <map>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <vector>

#include "adapt/search/procedure.hpp"
#include "daemon/store/events.hpp"
#include "drivers/config/board_file.hpp"

namespace lanewright {

// What the board file says that the probes need.
struct PreflightSetup {
    PreflightLimits limits;
    bool counted = false;           // the monitor counts where it is told to look
    double height_reach_mv = 0;     // of its looks, to either side
    std::uint64_t least_bits = 0;   // of one look
    std::uint64_t most_errors = 0;  // where its counter stops; 0: it does not
};

// Names of the measured items, as they are stored.
namespace item {
inline constexpr const char* open_codes = "open_codes";
inline constexpr const char* monitor = "monitor";
inline constexpr const char* repeatability = "repeatability";
inline constexpr const char* return_error = "return_error";
inline constexpr const char* settle_time = "settle_time";
inline constexpr const char* alone = "alone";
inline constexpr const char* together = "together";
inline constexpr const char* parallel = "parallel";  // concluded from the two before
}  // namespace item

struct ProbeInput {
    const LaneProblem* problem = nullptr;  // its noise is the declared one
    PreflightSetup setup;
    std::map<std::string, PreflightItem> before;  // items of this lane that are concluded
};

class Probe : public Procedure {
  public:
    // Once nothing is proposed any more.
    virtual PreflightItem item() const = 0;

    Decision conclude() const override;
    Lesson lesson() const override { return {}; }
};

// Null where no item is called that. An item that builds on another one that is not concluded, or
// did not come to a value, proposes nothing and concludes `not_shown`.
std::unique_ptr<Probe> make_probe(const std::string& name, const ProbeInput& input);

// What all of it may cost in bench time, where nothing is known yet: declared cost of one reading,
// and how many lanes the run has.
double preflight_cost_at_most_s(double reading_s, std::size_t lanes);

// "error ratio 1e-06, 2^31 bits": readings are comparable under the same settings only.
std::string settings_of(const MarginWanted& reading);

}  // namespace lanewright
