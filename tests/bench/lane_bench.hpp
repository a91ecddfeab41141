#pragma once
// Purpose:   a bench without wires: lanes of the simulated target read through its own monitor, for
//            benchmarks of strategies, with the oracle beside them.
// Ownership: a BenchLane refers to its BenchFiles, which must outlive it.
// Threads:   a BenchLane by one thread at a time; different ones at the same time.
// Errors:    std::runtime_error with every complaint, for a file that cannot be used.

#include <cstdint>
#include <memory>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "adapt/search/procedure.hpp"
#include "daemon/engine/lane_setup.hpp"
#include "sim_target/physics/truth.hpp"

namespace lanewright::bench {

enum class Reader : std::uint8_t { latched, counted };
const char* name_of(Reader reader);

struct BenchFiles {
    BoardFile latched, counted;
    Recipe recipe;
    sim::TargetFile target;  // with its population

    const BoardFile& board(Reader reader) const {
        return reader == Reader::latched ? latched : counted;
    }
};

// The demo's boards and recipe, and that target file of configs/targets, its population drawn
// with `seed`.
BenchFiles load_bench_files(const std::string& target, std::uint64_t seed);

// One lane of one board of the population.
class BenchLane {
  public:
    // Finds the best codes, which takes some seconds of CPU time unless they are in the cache.
    BenchLane(const BenchFiles& files, int board, int lane, unsigned threads);
    ~BenchLane();
    BenchLane(BenchLane&&) noexcept;
    BenchLane& operator=(BenchLane&&) noexcept;

    // What the present codes are at the start: those of the chip's reset.
    Codes reset_codes() const;
    double true_score(const Codes& codes) const;  // noise-free, by the oracle
    const Codes& best_codes() const { return best_codes_; }
    double best_score() const { return best_score_; }
    double attainment(const Codes& codes) const { return true_score(codes) / best_score_; }
    bool outside_plain() const;  // beyond what a plain lossy line can express
    const sim::Oracle& oracle() const;
    const BenchFiles& files() const { return *files_; }
    const sim::TargetFile& target() const;
    int lane() const { return lane_; }

    // In the target's order r1, c1, r2, c2, and back.
    std::vector<int> target_order(const Codes& codes) const;
    Codes board_order(const std::vector<int>& codes) const;

  private:
    struct Parts;
    const BenchFiles* files_;
    int lane_;
    std::unique_ptr<Parts> parts_;
    std::vector<std::size_t> dimension_of_bank_;  // by the target's order
    Codes best_codes_;
    double best_score_ = 0;
};

// A lane read from its first reading on, as a run does: monitor and receiver remember.
class ReadLane {
  public:
    ReadLane(const BenchLane& lane, Reader reader);
    ~ReadLane();
    Reading read(const Request& request);
    std::uint32_t readings() const { return ordinal_; }
    const BoardFile& board() const { return lane_.files().board(reader_); }

  private:
    struct Parts;
    Reading latched(const Request& request);
    Reading counted(const Request& request);

    const BenchLane& lane_;
    Reader reader_;
    std::unique_ptr<Parts> parts_;
    std::uint32_t ordinal_ = 0;
};

struct SearchPlan {
    std::string strategy;
    double readings = 60;  // standard readings; 0: no limit
    std::uint32_t stride = 1;
    std::optional<Codes> start;  // present codes; else those of the chip's reset
};

struct SearchResult {
    Decision decision;
    double attainment = 0;    // true score of the decided codes over that of the best
    bool impossible = false;  // better than the oracle's best by more than its own tolerance
};

// Drives a strategy to its end on that lane, as the engine would. Throws if it does not end within
// its budget.
SearchResult run_search(const BenchLane& lane, ReadLane& reader, const SearchPlan& plan);
// Descents from several starts that share the budget evenly; the last few readings tell which of
// their decisions is taken.
SearchResult run_from_starts(const BenchLane& lane, Reader reader, SearchPlan plan,
                             const std::vector<Codes>& starts);

// The value that this share of all lie at or below (nearest rank); not a number of none.
double quantile(std::vector<double> values, double share);

}  // namespace lanewright::bench
