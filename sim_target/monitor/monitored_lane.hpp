#pragma once
// Purpose:   a lane behind its eye monitor: what a look counts and a reading latches, with all that
//            the monitor, the receiver's lock and the writing of codes add to the truth. The board
//            reads through it; tests and benchmarks may do so without a board.
// Ownership: owns the lane's oracle, its history and the eyes of the last codes asked for.
// Threads:   one at a time.
//
// Every draw is keyed by seed, lane, reading number, codes, place, and the how many-th look there
// in that reading; see lane_history.hpp for what runs on bench time.

#include <deque>
#include <initializer_list>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "sim_target/monitor/lane_history.hpp"
#include "sim_target/monitor/lane_model.hpp"
#include "sim_target/monitor/monitor_axis.hpp"
#include "sim_target/physics/truth.hpp"

namespace lanewright::sim {

// The edges at an error ratio that this monitor would find if it had neither noise nor drift and
// the receiver no history: in nominal steps times their nominal size, from the origin. Closed
// where more than the ratio is counted at the origin itself. An edge beyond the monitor's reach
// is given as the reach.
struct NominalEdges {
    bool closed = true;
    double up_mv = 0, down_mv = 0, left_ui = 0, right_ui = 0;
    double centre_error_ratio = 0.5;
};

class MonitoredLane final : public LaneModel {
  public:
    // Positions that a counting monitor can be told, to either side of its centre.
    static constexpr int offset_reach = 255, phase_reach = 63;

    // Throws BadData for a channel file that cannot be used.
    MonitoredLane(const TargetFile& target, int lane);

    void number(std::uint64_t ordinal, bool beside = false) override;
    bool put(const std::vector<int>& codes, bool loops_held) override;
    bool fall_back(const std::vector<int>& codes) override;
    LatchedEdges latch(const LookTime& time, double error_ratio, std::uint64_t bits) override;
    CountedErrors count(const LookTime& time, const MonitorPoint& point,
                        unsigned bits_log2) override;
    MonitorPoint origin() const override { return {offset_.origin(), phase_.origin()}; }

    // Noise-free; codes as elsewhere here, error_ratio in (0, 0.1].
    NominalEdges nominal_edges(const std::vector<int>& codes, double error_ratio);
    // The share of errors counted at a place that need not be a whole step, noise-free.
    double nominal_ratio(const std::vector<int>& codes, double offset_steps, double phase_steps);

    const Oracle& oracle() const { return oracle_; }
    const LaneHistory& history() const { return history_; }
    const MonitorAxis& offset_axis() const { return offset_; }
    const MonitorAxis& phase_axis() const { return phase_; }

  private:
    struct Solved {
        std::vector<int> codes;
        std::unique_ptr<EyeProbe> eye;
        double spread_ui = 1;
    };
    enum class Mishap : std::uint8_t { none, burst, slip };
    struct Event {
        Mishap mishap = Mishap::none;
        double size = 0;         // even in 0 to 1
        std::uint64_t look = 0;  // which look of the reading it strikes
    };

    bool take(const std::vector<int>& codes, bool loops_held);
    Solved& solved(const std::vector<int>& codes);
    const Standing& standing();
    Moment moment(const Standing& now, const LookTime& time) const;
    Event event(const Standing& now) const;
    std::vector<std::uint64_t> key_of(const Standing& now,
                                      std::initializer_list<std::uint64_t> words) const;
    std::optional<Margins> edges_to_latch(const Standing& now, const LookTime& time,
                                          double error_ratio, std::uint64_t bits);
    double counted_share(EyeProbe& eye, double phase_ui, double offset_mv, const Moment& moment);
    double share_of_errors(const Standing& now, const LookTime& time, const MonitorPoint& point,
                           KeyedRandom& random);
    double edge(const std::vector<int>& codes, double error_ratio, const MonitorPoint& way);
    void charge(std::uint64_t look, std::uint64_t bits);

    Oracle oracle_;
    MonitorOptions options_;
    ChipOfTarget chip_;
    std::uint64_t seed_;
    std::uint64_t lane_;
    double bit_rate_hz_;
    bool out_of_sync_, inverted_, too_few_, not_monotone_, wrong_bits_, loops_off_;
    MonitorAxis offset_, phase_;
    LaneHistory history_;
    std::deque<Solved> solved_;  // the last used first
    std::vector<int> codes_;     // put last
    bool held_ = false;
    std::uint64_t ordinal_ = 0;
    bool beside_ = false;
    bool begun_ = false;  // a reading with this number and these codes
};

}  // namespace lanewright::sim
