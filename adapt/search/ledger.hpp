#pragma once
// Purpose:   what a search has read of its lane, and what that cost against the budget.
// Ownership: owns its readings; the LaneProblem must outlive it.
// Threads:   one caller at a time.
//
// Readings are filed under the codes that were read back. A request that came back with other codes
// is remembered too, so that it is not asked for again.

#include <deque>
#include <map>
#include <span>
#include <vector>

#include "adapt/search/merit.hpp"
#include "adapt/search/procedure.hpp"

namespace lanewright {

class Ledger {
  public:
    struct Entry {
        std::vector<Reading> readings;  // in the order taken; never empty
        Merit first;                    // of the first reading: what a search steers by
    };

    explicit Ledger(const LaneProblem& problem) : problem_(&problem) {}

    // Files one reading of a request for `asked`. Void readings are left out.
    void add(const Codes& asked, const Reading& reading);

    // The readings of these codes, or of those the board answered with; null if there are none.
    const Entry* find(const Codes& asked) const;
    bool was_read(const Codes& asked) const { return find(asked) != nullptr; }

    const std::map<Codes, Entry>& entries() const { return entries_; }

    // Codes in order of merit, best first; equal ones by fewer codes changed from the present ones,
    // then by lowest codes. Only codes that the space allows.
    std::vector<Codes> ranking() const;

    // How many more search readings of this problem the budget holds; a large number if unlimited.
    std::size_t affordable() const;

    std::uint32_t reading_count() const { return reading_count_; }
    double standard_readings() const { return standard_readings_; }
    double bench_s() const { return bench_s_; }
    std::size_t asked_differently() const { return aliases_.size(); }

    // The request of one search reading. A counting monitor is told where the edges may be: where
    // the last open reading at the nearest codes found them.
    Request request(Codes codes, Condition now, std::string why) const;

  private:
    struct Found {
        Codes codes;
        Expected edges;
    };
    void remember(const Reading& reading);
    Expected expected_at(const Codes& codes) const;

    const LaneProblem* problem_;
    std::map<Codes, Entry> entries_;
    std::map<Codes, Codes> aliases_;  // asked for -> read back, where they differ
    std::deque<Found> found_;  // edges of the last open counted readings, the latest in front
    std::uint32_t reading_count_ = 0;
    double standard_readings_ = 0, bench_s_ = 0;
};

// The number of dimensions in which two codes differ.
std::size_t codes_changed(const Codes& a, const Codes& b);

}  // namespace lanewright
