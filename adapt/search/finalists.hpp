#pragma once
// Purpose:   the last step of every strategy: the best few codes are read again, so that the
//            decision rests on fresh means and not on the luckiest of many readings.
// Ownership: pure functions; the ledger belongs to the caller.
// Threads:   any.

#include <cstddef>
#include <string>
#include <vector>

#include "adapt/search/ledger.hpp"
#include "adapt/search/procedure.hpp"

namespace lanewright {

// Readings kept back for this step out of a budget of so many: a quarter, at most twelve.
std::size_t finalist_share(std::size_t total_readings);

// What to read next of the finalists, in rounds that go through them forwards and backwards in
// turn, so that a steady drift cancels; empty: done. At most three rounds of the four best codes,
// the present ones among them where they are open and may stay; fewer where `share` is smaller.
std::vector<Codes> next_finalists(const LaneProblem& problem, const Ledger& ledger,
                                  std::size_t share);

struct Choice {
    Codes codes;
    bool unchanged = false;
    std::string reason;
};

// The decision from all that was read. Codes that were read again are judged by those later
// readings only: their first one chose them, so it is too good on average. If `allow_unchanged`,
// the present codes stay unless the best mean is better by a one-sided test at 5 %: difference of
// the two scores over its standard error above 1.645 (both scores taken as normal).
Choice choose(const LaneProblem& problem, const Ledger& ledger);

}  // namespace lanewright
