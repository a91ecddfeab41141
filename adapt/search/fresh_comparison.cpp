// The fresh before and after of a decision: former and new codes in turn.

#include <algorithm>
#include <cmath>

#include "adapt/search/ledger.hpp"
#include "adapt/search/procedure.hpp"
#include "adapt/search/score.hpp"
#include "adapt/search/text.hpp"

namespace lanewright {
namespace {

class FreshComparison : public Procedure {
  public:
    FreshComparison(const LaneProblem& problem, Codes decided, std::uint32_t repeats)
        : problem_(problem),
          ledger_(problem_),
          decided_(std::move(decided)),
          rounds_(std::max<std::uint32_t>(repeats, 1)) {
        former_readable_ = problem_.space == nullptr || problem_.space->allows(problem_.present);
    }

    std::vector<Request> propose(Condition now) override {
        std::vector<Request> requests;
        if (done_ >= rounds_) return requests;
        for (const auto& codes : round()) {
            requests.push_back(ledger_.request(codes, now, "fresh, after the decision"));
        }
        return requests;
    }

    void observe(std::span<const Reading> readings) override {
        if (done_ >= rounds_) return;
        const auto asked = round();
        for (std::size_t i = 0; i < std::min(asked.size(), readings.size()); ++i) {
            ledger_.add(asked[i], readings[i]);
        }
        done_ += 1;
    }

    Decision conclude() const override {
        Decision decision;
        decision.codes = decided_;
        decision.unchanged = decided_ == problem_.present;
        decision.reading_count = ledger_.reading_count();
        decision.standard_readings = ledger_.standard_readings();
        decision.bench_s = ledger_.bench_s();
        describe(decision);
        return decision;
    }

    Lesson lesson() const override { return {problem_.lane, {}}; }
    std::string_view phase() const override { return "fresh"; }

  private:
    // A B B A; two readings where there is only one set of codes to read.
    std::vector<Codes> round() const {
        if (decided_ == problem_.present || !former_readable_) return {decided_, decided_};
        return {problem_.present, decided_, decided_, problem_.present};
    }

    Score fresh_score(const Codes& codes) const {
        const auto* entry = ledger_.find(codes);
        if (entry == nullptr) return score_of(Reading{}, problem_.required);
        return score_of(mean_of(entry->readings, problem_.noise), problem_.required);
    }

    void describe(Decision& decision) const {
        const Score after = fresh_score(decided_);
        if (after.status == Status::void_reading) {
            decision.reason = "the decided codes have not been read afresh";
            return;
        }
        decision.reason = "fresh readings of the decided codes score " + fixed(after.value, 3) +
                          " (95 % " + fixed(after.low, 3) + " to " + fixed(after.high, 3) + ")";
        if (decision.unchanged) return;
        if (!former_readable_) {
            decision.notes.push_back(
                "the former codes are outside the allowed codes and were not read again");
            return;
        }
        const Score before = fresh_score(problem_.present);
        if (before.status == Status::void_reading) return;
        decision.reason += ", of the former ones " + fixed(before.value, 3) + " (95 % " +
                           fixed(before.low, 3) + " to " + fixed(before.high, 3) + ")";
        if (after.high < before.low) {
            decision.notes.push_back("the decided codes read worse than the former ones");
        }
    }

    LaneProblem problem_;
    Ledger ledger_;
    Codes decided_;
    std::uint32_t rounds_, done_ = 0;
    bool former_readable_ = true;
};

}  // namespace

std::unique_ptr<Procedure> make_fresh_comparison(const LaneProblem& problem, Codes decided,
                                                 std::uint32_t repeats) {
    return std::make_unique<FreshComparison>(problem, std::move(decided), repeats);
}

}  // namespace lanewright
