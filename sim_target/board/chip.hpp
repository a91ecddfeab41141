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
#include "sim_target/board/lane_model.hpp"
#include "sim_target/board/register_file.hpp"

namespace lanewright::sim {

struct ChipOptions {
    double time_scale = 1;  // 0: nothing takes time
    double bit_rate_hz = 25e9;
    std::vector<int> reset_codes;  // r1, c1, r2, c2
};

class Chip final : private Hardware {
  public:
    // `side` is copied from; as many models as the map has lanes.
    Chip(TimeSource& time, const BoardSide& side, ChipOptions options,
         std::vector<std::unique_ptr<LaneModel>> models);

    RegisterFile& registers() { return registers_; }
    void reset();

    // The next moment at which a status will change by itself; TimePoint::max(): none.
    TimePoint next_change() const;
    TimePoint after(double seconds) const;  // now plus so much of the board's own time

  private:
    struct Lane {
        std::vector<int> codes;  // in effect
        bool locks = false;
        TimePoint locked_from{};
        LatchedEdges edges, pending;
        bool measuring = false;
        std::uint64_t started = 0;  // readings since the reset
        std::size_t group = 0;
    };

    std::uint32_t status(std::uint16_t lane, Part part) override;
    void started(std::uint16_t lane, Part part) override;
    void code_written(std::uint16_t lane) override;

    void take_codes(std::uint16_t lane);
    void start_reading(std::uint16_t lane);
    bool has_lock(const Lane& lane) const;
    std::uint64_t dwell_bits(std::uint16_t lane) const;
    void finish_due();
    void assign_groups(const Binding& binding);

    TimeSource& time_;
    ChipOptions options_;
    double lock_s_;
    double default_dwell_s_;
    bool has_strobe_;
    std::vector<std::unique_ptr<LaneModel>> models_;
    std::vector<Lane> lanes_;
    std::vector<TimePoint> busy_until_;  // by group; {} when idle
    RegisterFile registers_;
};

}  // namespace lanewright::sim
