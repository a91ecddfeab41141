#pragma once
// Purpose:   a bench without wires: the simulated target's lanes read by its own physics, for
//            benchmarks of strategies. Board, recipe and target are the demo's.
// Ownership: a TruthLane owns its oracle; files are values.
// Threads:   const calls of one TruthLane may run at the same time.
// Errors:    std::runtime_error with every complaint, for a file that cannot be used.

#include <cstdint>
#include <map>
#include <memory>
#include <string_view>
#include <vector>

#include "adapt/search/procedure.hpp"
#include "daemon/engine/lane_setup.hpp"
#include "sim_target/physics/truth.hpp"

namespace lanewright::bench {

struct DemoFiles {
    BoardFile board;
    Recipe recipe;
    sim::TargetFile target;
};

DemoFiles load_demo_files();

// One lane of one chip: what a reader sees of it, and what only the oracle knows.
class TruthLane {
  public:
    // `threads` find the best codes, which takes some seconds of CPU time.
    TruthLane(const DemoFiles& files, int lane, unsigned threads);

    // What the board would answer: the target's latched steps, as adapt reads them. Draws are
    // keyed by seed and ordinal.
    Reading read(const Request& request, std::uint64_t seed, std::uint32_t ordinal) const;

    // The codes that the chip comes up with, in the order of the board file's dimensions.
    Codes reset_codes() const;

    double true_score(const Codes& codes) const;
    double best_score() const { return best_score_; }
    int lane() const { return oracle_.lane(); }

  private:
    std::vector<int> target_order(const Codes& codes) const;

    const DemoFiles& files_;
    sim::Oracle oracle_;
    std::vector<std::size_t> dimension_of_bank_;  // by the target's order: r1, c1, r2, c2
    sim::Required required_;
    double best_score_ = 0;
};

struct SearchResult {
    Decision decision;
    double attainment = 0;    // true score of the decided codes over that of the best
    bool impossible = false;  // better than the oracle's best by more than its own tolerance
};

// Drives a strategy to its end on that lane, as the engine would. Throws if it does not end within
// its budget.
SearchResult run_search(const DemoFiles& files, const TruthLane& lane, std::string_view strategy,
                        std::uint64_t seed);

}  // namespace lanewright::bench
