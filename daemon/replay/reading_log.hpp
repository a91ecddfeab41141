#pragma once
// Purpose:   the readings of one lane as a bench: asked for codes, it hands out what was read at
//            them, and nothing else.
// Ownership: ReadingLog owns its index and refers to the readings, which must outlive it; Answers
//            refers to its log.
// Threads:   a log is immutable: any number of Answers on any threads; one Answers, one caller.

#include <cstdint>
#include <optional>
#include <span>
#include <unordered_map>
#include <unordered_set>
#include <vector>

#include "daemon/engine/run_state.hpp"

namespace lanewright {

struct CodesHash {
    std::size_t operator()(const Codes& codes) const;
};

class ReadingLog {
  public:
    // Readings of a search stand before the comparisons after it; each in the order taken.
    explicit ReadingLog(const std::vector<LaneReadingRecord>& readings);

    // Every reading of these codes, in the order in which it is handed out; empty: never read.
    std::span<const std::uint32_t> of(const Codes& codes) const;
    // Those of them at that error ratio.
    std::vector<std::uint32_t> at(const Codes& codes, double error_ratio) const;
    const Reading& reading(std::uint32_t number) const { return *readings_[number]; }

    std::size_t reading_count() const { return readings_.size(); }
    std::size_t code_count() const { return index_.size(); }
    const std::unordered_map<Codes, std::vector<std::uint32_t>, CodesHash>& all() const {
        return index_;
    }
    std::vector<double> error_ratios() const;  // each once, ascending; 0: not known

  private:
    std::vector<const Reading*> readings_;
    std::unordered_map<Codes, std::vector<std::uint32_t>, CodesHash> index_;
};

// Whether a reading at `logged` answers a request at `wanted`: the same ratio but for rounding, or
// one that nobody knows (0).
bool same_ratio(double logged, double wanted);

class Answers {
  public:
    explicit Answers(const ReadingLog& log) : log_(log) {}

    // The next reading of these codes at that error ratio, or from the first again when all were
    // handed out; null: never read.
    const Reading* next(const Codes& codes, double error_ratio);

    std::size_t handed_out() const { return handed_out_; }
    std::size_t again() const { return again_; }             // of these, handed out before
    std::size_t code_count() const { return next_.size(); }  // different codes handed out

    // The readings of these codes at that error ratio: those that were handed out, each once, or
    // those that never were.
    std::vector<Reading> readings(const Codes& codes, double error_ratio, bool handed_out) const;

  private:
    const ReadingLog& log_;
    std::unordered_map<Codes, std::size_t, CodesHash> next_;
    std::unordered_set<std::uint32_t> seen_;
    std::size_t handed_out_ = 0, again_ = 0;
};

}  // namespace lanewright
