#pragma once
// Purpose:   what all strategies share: read the present codes first, scan where the eye is closed,
//            search, read the finalists again, decide; all inside the budget.
// Ownership: owns its problem, ledger and notes; the problem's CodeSpace must outlive it.
// Threads:   one caller at a time.

#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "adapt/search/descent.hpp"
#include "adapt/search/ledger.hpp"
#include "adapt/search/procedure.hpp"

namespace lanewright {

class StagedSearch : public Procedure {
  public:
    explicit StagedSearch(const LaneProblem& problem);
    StagedSearch(const StagedSearch&) = delete;
    StagedSearch& operator=(const StagedSearch&) = delete;

    std::vector<Request> propose(Condition now) override;
    void observe(std::span<const Reading> readings) override;
    Decision conclude() const override;
    Lesson lesson() const override;
    std::string_view phase() const override { return phase_; }

  protected:
    // What the strategy wants read next; called again after each batch. `start` has been read, and
    // is the best of the scan where one was needed. Only depends on the ledger.
    virtual Question search(const Codes& start) const = 0;
    // Whether a closed start is worth a scan; a strategy that reads everything anyway says no.
    virtual bool scans_when_closed() const { return true; }
    // What a reader of the log should know of the strategy.
    virtual std::vector<std::string> search_notes() const { return {}; }

    const LaneProblem& problem() const { return problem_; }
    const Ledger& ledger() const { return ledger_; }
    const CodeSpace& space() const { return *problem_.space; }
    // Readings that may still go into the search; the finalists' share is kept back.
    std::size_t search_room() const;

  private:
    struct Plan {
        std::vector<Codes> batch;
        std::string why;
        std::string_view phase;
        bool cut_short = false;  // the budget ended the search, not the strategy
    };
    struct Scan {
        std::vector<Codes> batch;    // empty: the scan is over, or was not needed
        std::optional<Codes> start;  // where the search begins; empty: nowhere is any slope
        std::size_t looked_at = 0;   // codes of the scan's order that it came to
        bool used = false;
    };

    Plan plan() const;
    Plan trimmed(std::vector<Codes> wanted, std::string why, std::string_view phase) const;
    Plan finals(bool cut_short) const;
    Scan scan() const;
    std::vector<std::string> notes(const Codes& decided) const;

    const CodeSpace no_space_;
    LaneProblem problem_;
    Ledger ledger_;
    Codes start_;                    // present codes, or the nearest allowed ones; may be empty
    std::size_t total_room_ = 0;     // readings the whole budget holds
    std::vector<Codes> scan_order_;  // empty until a scan is needed
    std::vector<Codes> pending_;
    std::string pending_why_;
    std::string_view phase_ = "start";
};

}  // namespace lanewright
