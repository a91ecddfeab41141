#pragma once
// Purpose:   what a lane remembers of its readings, so that a reading taken again is the same
//            reading: bench time, drift, wander, lock, where the loop landed, what a return to a
//            code left behind. All of it follows from the order of the readings' numbers and from
//            their codes, never from what went over the wire between.
// Ownership: owns its records, the last few thousand.
// Threads:   one at a time.
//
// A record is made when a number first begins with its codes, and stays as it is; what follows
// it is made from it. Going back to an earlier record (a reading lost with the program that asked
// for it) finds it again, and the ones after it as long as the same readings follow; else they are
// forgotten. The same number with other codes takes the place of its record.
//
// Readings beside a run's own (checks and references, numbered apart) follow whatever is current,
// and nothing of the run's own follows from them, not even where they come first: one more or less
// changes none of the run's own readings.

#include <array>
#include <cstdint>
#include <deque>
#include <map>
#include <tuple>

#include "sim_target/monitor_options.hpp"
#include "sim_target/physics/keyed_random.hpp"

namespace lanewright::sim {

using FourCodes = std::array<int, 4>;

struct Standing {
    std::uint64_t ordinal = 0;
    FourCodes codes{};
    std::uint64_t entered = 0;  // the number with which this stay at the codes began
    bool changed = false;       // it is that number
    bool locked = false;
    double time_s = 0;     // charged bench time of the lane when it began
    double charged_s = 0;  // its own, as far as it has come
    double offset_drift = 0, phase_drift = 0, wander = 0;  // in their standard deviations
    double landing_ui = 0;
    double return_gain = 1, return_offset_mv = 0;
};

class LaneHistory {
  public:
    LaneHistory(const MonitorOptions& monitor, const ChipOfTarget& chip, std::uint64_t seed,
                int lane);
    LaneHistory(const LaneHistory&) = delete;  // it points into itself
    LaneHistory& operator=(const LaneHistory&) = delete;

    // Whether lock holds when these codes follow the run's own last reading.
    bool locks(const FourCodes& codes, double spread_ui) const;
    // Codes without lock were put, and no reading may have begun with them.
    void missed_lock() { own_.missed_lock = beside_.missed_lock = true; }

    // The record of this number and these codes becomes the current one.
    const Standing& begin(std::uint64_t ordinal, const FourCodes& codes, double spread_ui,
                          bool loops_held, bool beside = false);
    const Standing* current() const { return current_->current(); }

    // A reading's looks begin anew, from the first.
    void restart();
    struct LookNumber {
        std::uint64_t nth = 0;    // at this place since the reading began
        std::uint64_t index = 0;  // of all looks of the reading
    };
    LookNumber next_look(int offset, int phase, unsigned bits_log2);
    // Bench time spent on the current reading. Looks taken again are charged once.
    void charge(double seconds);

  private:
    struct Chain {
        std::deque<Standing> records;  // in the order of their beginning
        std::size_t at = 0;
        bool missed_lock = false;

        const Standing* current() const { return records.empty() ? nullptr : &records[at]; }
        bool find(std::uint64_t ordinal, const FourCodes& codes);
        void drop_what_follows(std::uint64_t ordinal);
    };
    // What a new record is made from.
    struct Before {
        const Standing* standing = nullptr;
        bool left_out = false;  // a number that would have come between
    };

    bool lock_after(const Standing* before, const FourCodes& codes, double spread_ui) const;
    Standing made(const Before& from, const Standing& named, double spread_ui,
                  bool loops_held) const;
    double drawn(Purpose purpose, std::uint64_t ordinal, std::uint64_t which) const;
    double landing(const Before& from, const Standing& now, bool loops_held) const;

    double drift_time_s_;
    LockOptions lock_;
    WriteEffects effects_;
    double return_times_;
    bool never_locks_;
    std::uint64_t seed_, lane_;
    Chain own_, beside_;
    Chain* current_ = &own_;
    double passed_s_ = 0;  // since the reading began anew
    std::uint64_t looks_ = 0;
    std::map<std::tuple<int, int, unsigned>, std::uint64_t> looks_at_;
};

}  // namespace lanewright::sim
