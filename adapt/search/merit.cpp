#include "adapt/search/merit.hpp"

#include <algorithm>
#include <cmath>

#include "adapt/search/score.hpp"

namespace lanewright {
namespace {

// Keeps a closed side from hiding all the others: in units of score.
constexpr double softening = 0.1;

class HarmonicMean {
  public:
    void add(const std::optional<Measured>& edge, double required, double factor) {
        if (!edge || !(required > 0)) return;
        const bool closed = edge->bound == Bound::at_most;
        const double side = closed ? 0 : std::max(0.0, factor * edge->value / required);
        inverse_sum_ += 1 / (side + softening);
        count_ += 1;
    }
    double value() const { return count_ > 0 ? count_ / inverse_sum_ - softening : 0; }

  private:
    double inverse_sum_ = 0, count_ = 0;
};

}  // namespace

bool gives_slope(const Merit& merit) {
    return merit.roundness > 0 || (merit.score < 0 && std::isfinite(merit.score));
}

Merit merit_of(const Reading& reading, const Required& required) {
    Merit merit;
    if (reading.status == Status::no_lock || reading.status == Status::void_reading) return merit;
    const double score = score_of(reading, required).value;
    merit.score = std::isnan(score) ? 0 : score;
    merit.rank = reading.status == Status::closed || !(score > 0) ? 1 : 2;
    HarmonicMean sides;
    sides.add(reading.up_mv, required.height_mv, 2);
    sides.add(reading.down_mv, required.height_mv, 2);
    sides.add(reading.left_ui, required.width_ui, 2);
    sides.add(reading.right_ui, required.width_ui, 2);
    sides.add(reading.height_mv, required.height_mv, 1);
    sides.add(reading.width_ui, required.width_ui, 1);
    merit.roundness = sides.value();
    return merit;
}

}  // namespace lanewright
