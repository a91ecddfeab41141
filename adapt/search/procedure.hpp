#pragma once
// Purpose:   the one face of everything that measures one lane: strategies, baseline, verify.
// Ownership: a Procedure owns its state; the CodeSpace it searches must outlive it.
// Threads:   one caller at a time; no shared state, no clock, no I/O, so any thread will do.
//            The same problem, lessons and key, told the same readings, propose the same requests.

#include <cstdint>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "adapt/search/code_space.hpp"
#include "adapt/stats/random.hpp"
#include "adapt/values/values.hpp"

namespace lanewright {

// What a reading costs, as the board file declares it. Budgets are charged by this, never by a
// clock: settle_s for the codes, per_look_s for each look, and the dwell (bits / bit rate).
struct CostModel {
    double settle_s = 0;
    double per_look_s = 0;
    std::uint32_t looks_per_margin = 1;  // looks behind one margin reading (latched monitors: 1)
    double bit_rate_hz = 0;
    bool dwell_shared = false;  // the looks of a margin share its dwell (counted monitors)
};

// Declared cost of a request in seconds of bench time.
double cost_s(const CostModel& cost, const Request& request);

// The same request in standard readings: 1 up to 16 looks and 0.1 s of dwell, else what it takes.
double standard_readings(const CostModel& cost, const Request& request);

// What a reading took, in standard readings: by its own looks and bits where they are on record,
// else by the request.
double standard_readings(const CostModel& cost, const Request& request, const Reading& reading);

struct Budget {
    double standard_readings = 0;  // 0: no limit
    double bench_s = 0;            // 0: no limit
};

// How a latched monitor or a counted one blurs a reading, as declared; a strategy's noise prior.
struct MonitorNoise {
    double height_step_mv = 0, width_step_ui = 0;    // quantum of one edge
    double height_sigma_mv = 0, width_sigma_ui = 0;  // repeatability of one edge, 1 sigma
    // Of a counted monitor's positions, 1 sigma, the same every time; it has no quantum.
    double height_nonlinearity_mv = 0, width_nonlinearity_ui = 0;
};

struct LaneProblem {
    Lane lane{};
    const CodeSpace* space = nullptr;
    Codes present;  // the codes found on the chip: measured first, and a candidate
    Required required;
    MarginWanted reading;  // error ratio and dwell of one search reading
    CostModel cost;
    Budget budget;
    MonitorNoise noise;
    bool allow_unchanged = true;  // keep the present codes when nothing is significantly better
    std::uint32_t stride = 1;     // exhaustive: every stride-th code of each dimension
};

struct Decision {
    Codes codes;
    bool unchanged = false;                     // the present codes are kept
    std::string reason;                         // one or two sentences for people
    std::vector<std::string> notes;             // what else a reader of the log should know
    std::uint32_t reading_count = 0;            // readings observed
    double standard_readings = 0, bench_s = 0;  // charged
};

// What a sibling lane may start from; empty until a strategy teaches something.
struct Lesson {
    Lane from{};
    std::vector<double> value;
};

class Procedure {
  public:
    virtual ~Procedure() = default;

    // The next batch under the condition that now holds. Empty: no reading is worth its cost.
    // Proposing twice without observing gives the same answer.
    virtual std::vector<Request> propose(Condition now) = 0;

    // The readings of the batch proposed last, whole and in its order; never void ones.
    virtual void observe(std::span<const Reading> readings) = 0;

    // At any time: the decision as it stands, with its reasons.
    virtual Decision conclude() const = 0;

    virtual Lesson lesson() const = 0;

    // What a progress line shows: "scan", "descent", "finalists", ...
    virtual std::string_view phase() const = 0;
};

using MakeProcedure = std::unique_ptr<Procedure> (*)(const LaneProblem&, std::span<const Lesson>,
                                                     RandomKey);

struct StrategyEntry {
    std::string_view name;     // as written in a recipe
    std::string_view summary;  // one line for help and errors
    MakeProcedure make;
};

// All strategies a recipe may name: one line each in strategies.cpp.
std::span<const StrategyEntry> strategies();

// The entry of that name, or null.
const StrategyEntry* find_strategy(std::string_view name);

// Former and new codes in turn (A B B A), so that a linear drift cancels; `repeats` such rounds.
// Where both are the same codes, they are read 2 * repeats times.
std::unique_ptr<Procedure> make_fresh_comparison(const LaneProblem& problem, Codes decided,
                                                 std::uint32_t repeats);

}  // namespace lanewright
