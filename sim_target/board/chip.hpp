#pragma once
// Purpose:   the simulated chip: registers in front, lanes with banks and monitors behind. Time
//            passes for dwells and locks only; a read shows what stands at that moment.
// Ownership: owns its register file and lane models; refers to the TimeSource.
// Threads:   io thread.

#include <cstdint>
#include <memory>
#include <vector>

#include "drivers/io/time_source.hpp"
#include "sim_target/board/board_side.hpp"
#include "sim_target/board/register_file.hpp"
#include "sim_target/monitor/lane_model.hpp"

namespace lanewright::sim {

struct ChipOptions {
    double time_scale = 1;  // 0: nothing takes time
    double bit_rate_hz = 25e9;
    std::vector<int> reset_codes;  // r1, c1, r2, c2
    double temperature_c = 25;
    ChipOfTarget chip;
};

class Chip final : private Hardware {
  public:
    // `side` is copied from; as many models as the map has lanes.
    Chip(TimeSource& time, const BoardSide& side, ChipOptions options,
         std::vector<std::unique_ptr<LaneModel>> models);

    RegisterFile& registers() { return registers_; }
    // What the lane models remember of their readings stays.
    void reset();

    // The next moment at which a status will change by itself; TimePoint::max(): none.
    TimePoint next_change() const;
    TimePoint after(double seconds) const;  // now plus so much of the board's own time

    // The host had the board pause so long between two operations on this lane. Counts for the
    // settling of new codes where time does not pass.
    void paused(std::uint16_t lane, double seconds) { lanes_[lane].paused_s += seconds; }
    // Something else writes what the target file says of this batch. True where it did.
    bool foreign_writes(std::uint64_t batch);

  private:
    enum class Work : std::uint8_t { none, latch, count };
    struct Lane {
        std::vector<int> codes;  // in effect
        bool locks = false;
        TimePoint locked_from{};
        TimePoint strobed_at{};
        double paused_s = 0;  // since then
        std::uint32_t losses = 0;

        Work work = Work::none;   // under way, its result not yet drawn
        bool measuring = false;   // under way, its result not yet shown
        Work shows = Work::none;  // what the measurement is
        LookTime look;
        double ratio = 0;
        std::uint64_t bits = 0;
        unsigned bits_log2 = 0;
        MonitorPoint point;
        LatchedEdges edges, pending_edges;
        CountedErrors counted, pending_counted;

        std::uint64_t started = 0;  // readings since the reset
        bool new_reading = true;    // no look since the strobe
        std::size_t group = 0;
    };

    std::uint32_t status(std::uint16_t lane, Part part) override;
    void started(std::uint16_t lane, Part part) override;
    void written(std::uint16_t lane, Part part) override;

    std::uint32_t monitor_status(std::uint16_t lane, Part part) const;
    std::uint32_t receiver_status(std::uint16_t lane, Part part) const;
    std::uint32_t board_status(Part part) const;

    std::vector<int> stored_codes(std::uint16_t lane) const;
    void take_codes(std::uint16_t lane);
    void fall_back(std::uint16_t lane);
    void hold(std::uint16_t lane, std::vector<int> codes, bool locks);
    void start_measuring(std::uint16_t lane, Work work);
    void prepare(std::uint16_t lane, Work work);
    void draw(std::uint16_t lane);
    void mark_parallel(std::uint16_t lane);
    bool has_lock(const Lane& lane) const;
    bool loops_run(std::uint16_t lane) const;
    double since_strobe_s(const Lane& lane) const;
    int centre(std::uint16_t lane, Part part) const;
    void finish_due();
    void assign_groups(const Binding& binding);
    void assign_tags();

    TimeSource& time_;
    ChipOptions options_;
    double lock_s_;
    double default_dwell_s_;
    bool has_strobe_, has_ordinal_;
    std::vector<std::unique_ptr<LaneModel>> models_;
    std::vector<Lane> lanes_;
    std::vector<std::uint16_t> tags_;    // which of the target's lanes stands behind each lane
    std::vector<TimePoint> busy_until_;  // by group; {} when idle
    RegisterFile registers_;
};

}  // namespace lanewright::sim
