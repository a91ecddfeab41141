#pragma once
// Purpose:   a scripted board with a counting monitor: an eye whose edges are known in closed form.
// Ownership: owns everything; run() closes the board before it returns.
// Threads:   the test's.
//
// Each side is one Gaussian: the error ratio is erfc(Q / sqrt 2) / 2 with Q the smallest of
// (reach - distance) / sigma over the four directions, so the edge at a ratio lies Q(ratio) sigmas
// inside the reach. Counts are the expected ones, rounded.

#include "session_bench.hpp"

namespace lanewright::test {

struct KnownEye {
    double up_mv = 84, down_mv = 76, left_ui = 0.44, right_ui = 0.40;  // where Q is 0
    double sigma_mv = 5, sigma_ui = 0.02;
    // From the decision point.
    double error_ratio(double offset_mv, double phase_ui) const;
};

class CountedBench : public SessionBench {
  public:
    CountedBench();

    std::uint32_t& at(std::uint32_t address, unsigned lane = 0) {
        return scripted.registers[address + 0x40 * lane];
    }
    // Called before the chip's own reaction to a write.
    std::function<void(const DoneWrite&)> before;
    KnownEye eye;
    bool pattern_errors_exceed_bits = false;
    std::uint32_t looks = 0;

  private:
    void react(const DoneWrite& done);
    void count(unsigned lane);
};

Request counted_margin(std::int32_t a, std::int32_t b);

}  // namespace lanewright::test
