#include "adapt/margin/edge_side.hpp"

#include <algorithm>
#include <cmath>
#include <utility>

#include "adapt/stats/normal.hpp"

namespace lanewright {
namespace {

constexpr double least_fall = 0.02, most_fall = 6;  // of Q per step
constexpr double worth_while = 0.8;  // of the variance: what a look must leave at most

}  // namespace

void EdgeSide::expect(double edge_steps, double fall) {
    if (edge_steps == expected_ && fall == expected_fall_) return;
    expected_ = edge_steps;
    expected_fall_ = fall;
    stale_ = true;
}

// Where nothing is known, noise is taken as eating up four tenths of the opening: common practice.
double EdgeSide::likely_fall() const {
    if (fit_ && fit_->slope_known) return fit_->fall;
    if (expected_fall_ > 0) return std::clamp(expected_fall_, least_fall, most_fall);
    const double edge = expected_ > 0 ? expected_ : range_.first_steps;
    return std::clamp(plan_.wanted_q / (0.4 * edge), 0.1, 2.0);
}

void EdgeSide::add(const Seen& seen) {
    looks_.add(seen);
    if (seen.steps != 0) ++taken_;
    stale_ = recount_ = true;
}

void EdgeSide::settle() {
    if (std::exchange(recount_, false)) {
        const auto all = looks_.seen();
        const bool told = taken_ > 0 && std::any_of(all.begin(), all.end(), tells);
        const EdgeModel with = model();
        fit_.reset();
        if (told) fit_ = fit_edge(all, with);
    }
    if (std::exchange(stale_, false)) next_ = find_next();
}

EdgeModel EdgeSide::model() const {
    EdgeModel model;
    model.wanted_q = plan_.wanted_q;
    model.decade_q = plan_.decade_q;
    model.likely_fall = likely_fall();
    model.nonlinearity_steps = range_.nonlinearity_steps;
    // Most of what makes readings differ is slow and moves all looks of one alike; the looks among
    // themselves scatter by a third of it (common practice).
    model.scatter_steps = range_.step > 0 ? range_.sigma / range_.step / 3 : 0;
    return model;
}

EdgeSide::Bracket EdgeSide::bracket() const {
    Bracket between;
    for (const Seen& seen : looks_.seen()) {
        if (seen.ratio() > plan_.ratio) {
            if (!between.bad) between.bad = seen.steps;
        } else if (!between.bad) {
            between.good = seen.steps;
        }
    }
    return between;
}

bool EdgeSide::collapsed() const {
    const Bracket between = bracket();
    if (between.bad && *between.bad <= 1) return true;
    return fit_ && fit_->edge_steps < 1;
}

std::optional<Wish> EdgeSide::find_next() const {
    if (const Seen* suspect = looks_.suspect(); suspect != nullptr && suspect->steps > 0) {
        return Wish{suspect->steps, plan_.short_bits};
    }
    if (fit_) return refine();
    if (!begun()) {
        const double wanted = expected_ > 0 ? expected_ + 0.3 / likely_fall() : range_.first_steps;
        const auto steps =
            static_cast<std::int32_t>(std::lround(std::clamp<double>(wanted, 1, range_.reach)));
        return Wish{steps, plan_.short_bits};
    }
    return narrow(bracket());
}

// No position tells a Q yet: between the last without errors and the first with half of them.
std::optional<Wish> EdgeSide::narrow(const Bracket& between) const {
    const std::int32_t good = between.good.value_or(0);
    std::int32_t steps = 0;
    if (between.bad) {
        const std::int32_t bad = *between.bad;
        if (bad - good <= 1) {
            // No noise is so small that nothing shows between none and half errors: look twice.
            if (looks_.at(bad)->looks > 1) return std::nullopt;
            return Wish{bad, plan_.short_bits};
        }
        // Ranges are wide compared with edges: the geometric mean. Fewer than half errors tell
        // besides how far the edge may be.
        double wanted = good > 0 ? std::sqrt(double(good) * bad) : 0.5 * bad;
        if (good == 0 && expected_ > 0 && taken_ == 1) wanted = 0.75 * bad;
        const Seen& seen = *looks_.at(bad);
        if (seen.ratio() < 0.45) {
            wanted = std::max(bad - (plan_.decade_q - seen.q) / likely_fall(), 0.5 * (good + bad));
        }
        steps = std::clamp(static_cast<std::int32_t>(std::lround(wanted)), good + 1, bad - 1);
    } else {
        if (good >= range_.reach) return std::nullopt;
        const std::int32_t more = expected_ > 0 && taken_ == 1 ? std::max(2, good / 3) : good;
        steps = std::min(range_.reach, good + std::max(more, 2));
        // No eye opens further than its own unit interval; a monitor may reach beyond.
        if (good + 1 < range_.likely_most && range_.likely_most < range_.reach) {
            steps = std::min(steps, (good + range_.likely_most + 1) / 2);
        }
    }
    return Wish{steps, plan_.short_bits};
}

double EdgeSide::bits_at(double steps) const {
    const double ratio = normal_tail(std::max(fit_->q_at(steps, plan_.wanted_q), 0.0));
    return std::clamp(plan_.goal_errors / std::max(ratio, 1e-300), plan_.short_bits,
                      plan_.long_bits);
}

// One position tells a Q; the next one is the likeliest to tell another, on the inner side if it
// can be.
std::optional<Wish> EdgeSide::second_position(double bits) const {
    const Bracket between = bracket();
    std::int32_t low = between.good.value_or(0), high = between.bad.value_or(range_.reach + 1);
    const auto wanted = static_cast<std::int32_t>(std::lround(fit_->edge_steps + 0.3 / fit_->fall));
    if (high - low > 1) return Wish{std::clamp(wanted, low + 1, high - 1), bits};
    // Neighbours around the edge: the slope shows on either side of the two.
    const Seen* beyond = looks_.at(high + 1);
    if (high < range_.reach && beyond == nullptr && looks_.at(high)->ratio() < 0.02) {
        return Wish{high + 1, bits};
    }
    const Seen* inner = looks_.at(low);
    if (low > 0 && inner != nullptr && inner->bits < plan_.long_bits) {
        return Wish{low, plan_.long_bits};
    }
    return std::nullopt;
}

// The look that leaves the least variance of the edge at both error ratios.
std::optional<Wish> EdgeSide::refine() const {
    const EdgeModel model = this->model();
    const EdgeFit& fit = *fit_;
    const Foresight foresight(looks_.seen(), model, fit);
    const double now = foresight.variance(0, 0);
    const double good_enough = std::max(
        0.03,
        0.3 * std::hypot(range_.sigma / std::max(range_.step, 1e-300), range_.nonlinearity_steps));
    if (fit.slope_known && fit.edge_error < good_enough && fit.decade_error < good_enough) {
        return std::nullopt;
    }
    // Where the edge itself is far from certain, a short look finds out first.
    const double ample = std::max(plan_.long_bits / 8, plan_.short_bits);
    if (!fit.slope_known) return second_position(ample);
    const bool vague = fit.edge_error * fit.fall > 0.7;
    const double from = fit.edge_steps - 0.6 / fit.fall, to = fit.edge_steps + 2.2 / fit.fall;
    const std::int32_t lowest = range_.sees_centre ? 0 : 1;
    const auto first = std::max(lowest, static_cast<std::int32_t>(std::floor(from)));
    const auto last = std::min(range_.reach, static_cast<std::int32_t>(std::ceil(to)));
    const std::int32_t stride = std::max(1, (last - first + 6) / 7);
    std::optional<Wish> best;
    double least = worth_while * now;
    for (std::int32_t steps = first; steps <= last; steps += stride) {
        const Seen* seen = looks_.at(steps);
        if (steps == 0 || (seen != nullptr && seen->errors > plan_.goal_errors)) continue;
        double bits = bits_at(steps);
        if (vague) bits = std::min(bits, ample);
        const double then = foresight.variance(steps, bits);
        if (then < least) {
            least = then;
            best = Wish{steps, bits};
        }
    }
    return best;
}

Measured EdgeSide::edge() const {
    const auto measured = [&](double steps, double error, Bound bound) {
        return Measured{steps * range_.step, std::hypot(error * range_.step, range_.sigma), bound};
    };
    const Bracket between = bracket();
    if (fit_) {
        if (fit_->edge_steps > range_.reach) return measured(range_.reach, 0, Bound::at_least);
        // Where nothing was good, the centre cannot vouch for there being an edge at all.
        if (!range_.sees_centre && !between.good && between.bad && fit_->edge_steps < 1) {
            return measured(*between.bad, 0, Bound::at_most);
        }
        return measured(std::max(fit_->edge_steps, 0.0), fit_->edge_error, Bound::exact);
    }
    if (!between.bad) return measured(between.good.value_or(0), 0, Bound::at_least);
    if (!between.good && !range_.sees_centre) {
        return measured(*between.bad, 0, Bound::at_most);
    }
    const double good = between.good.value_or(0), bad = *between.bad;
    return measured(0.5 * (good + bad), (bad - good) / std::sqrt(12.0), Bound::exact);
}

Measured EdgeSide::slope() const {
    if (!fit_ || !fit_->slope_known) return {0, 0, Bound::at_least};
    const double slope = range_.step / fit_->fall;
    return {slope, slope * fit_->fall_error / fit_->fall, Bound::exact};
}

}  // namespace lanewright
