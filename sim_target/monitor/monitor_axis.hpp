#pragma once
// Purpose:   where one axis of a lane's monitor really looks: its centre's place, the true size of
//            its steps, and each position's own error, all fixed for the lane.
// Ownership: owns its table.
// Threads:   const calls from any thread.
//
// Positions are steps from the centre, places are in the axis's unit (mV or UI) from the data
// sampler's decision point. A position's error is held inside ±0.45 step, so places rise strictly
// with positions. Between positions places go in straight lines.

#include <vector>

#include "sim_target/physics/keyed_random.hpp"

namespace lanewright::sim {

struct AxisDraw {
    double step = 1;            // nominal
    double centre_sigma = 0;    // of the centre's place
    double gain_tolerance = 0;  // the true step is evenly inside ± this share
    double position_sigma = 0;  // in steps
    int reach = 0;              // positions to either side that have an error of their own
};

class MonitorAxis {
  public:
    MonitorAxis(const AxisDraw& draw, KeyedRandom fixed, KeyedRandom positions);

    double place(double position) const;
    double position(double place) const;   // the inverse
    double step() const { return step_; }  // nominal
    double gain() const { return gain_; }
    // The position nearest to the data sampler's decision point, as the chip's alignment finds it.
    int origin() const { return origin_; }

  private:
    double bent(double position) const;  // in true steps
    double error(int position) const;

    double step_, centre_, gain_;
    int reach_, origin_ = 0;
    std::vector<double> errors_;
};

}  // namespace lanewright::sim
