#include "adapt/search/score.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <numbers>
#include <vector>

#include "adapt/stats/normal.hpp"
#include "adapt/stats/q_scale.hpp"

namespace lanewright {
namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();
constexpr double outside_each_limit = 0.025;

struct Side {
    Measured part;     // in units of score
    double share = 0;  // value, with "at most" counted as 0
};

void add_side(std::vector<Side>& sides, const std::optional<Measured>& edge, double factor) {
    if (!std::isfinite(factor)) return;  // nothing is required in this direction
    if (!edge || std::isnan(edge->value) || std::isnan(edge->std_error)) {
        sides.push_back({{0, infinity, Bound::exact}, -infinity});
        return;
    }
    const Measured part{edge->value * factor, edge->std_error * factor, edge->bound};
    sides.push_back({part, part.bound == Bound::at_most ? std::min(part.value, 0.0) : part.value});
}

std::vector<Side> sides_of(const Reading& reading, const Required& required) {
    const auto per = [](double wanted, double twice) {
        return wanted > 0 ? twice / wanted : infinity;
    };
    std::vector<Side> sides;
    if (reading.centred_assumed) {
        add_side(sides, reading.height_mv, per(required.height_mv, 1));
        add_side(sides, reading.width_ui, per(required.width_ui, 1));
        return sides;
    }
    add_side(sides, reading.up_mv, per(required.height_mv, 2));
    add_side(sides, reading.down_mv, per(required.height_mv, 2));
    add_side(sides, reading.left_ui, per(required.width_ui, 2));
    add_side(sides, reading.right_ui, per(required.width_ui, 2));
    return sides;
}

// At the required error ratio, where the edges can be carried there.
Reading carried(const Reading& reading, const Required& required) {
    constexpr double rounding = 1e-9;
    Reading out = reading;
    if (!reading.slopes || reading.status == Status::no_lock || !(required.error_ratio > 0) ||
        !(required.error_ratio < reading.error_ratio * (1 - rounding))) {
        return out;
    }
    const auto carry = [&](std::optional<Measured>& edge, const Measured& slope) {
        if (edge) {
            edge = carried_edge(*edge, slope, reading.error_ratio, required.error_ratio);
        }
    };
    carry(out.up_mv, reading.slopes->up_mv);
    carry(out.down_mv, reading.slopes->down_mv);
    carry(out.left_ui, reading.slopes->left_ui);
    carry(out.right_ui, reading.slopes->right_ui);
    out.error_ratio = required.error_ratio;
    out.basis = Basis::extrapolated;
    return out;
}

using Edge = std::optional<Measured> Reading::*;

struct Spread {
    double mean = 0, sigma = 0;
};

Spread spread_of(const std::vector<Measured>& edges) {
    Spread spread;
    const auto count = static_cast<double>(edges.size());
    for (const auto& edge : edges) spread.mean += edge.value / count;
    if (edges.size() < 2) return spread;
    for (const auto& edge : edges) {
        spread.sigma += (edge.value - spread.mean) * (edge.value - spread.mean) / (count - 1);
    }
    spread.sigma = std::sqrt(spread.sigma);
    return spread;
}

Bound joint_bound(const std::vector<Measured>& edges) {
    const auto any = [&](Bound bound) {
        return std::any_of(edges.begin(), edges.end(),
                           [&](const Measured& each) { return each.bound == bound; });
    };
    return any(Bound::at_most)    ? Bound::at_most
           : any(Bound::at_least) ? Bound::at_least
                                  : Bound::exact;
}

// Weighted by 1/variance where every edge has one, plainly otherwise.
double weighted_mean(const std::vector<Measured>& edges, double plain_mean) {
    double sum = 0, weights = 0;
    for (const auto& edge : edges) {
        if (!(edge.std_error > 0) || !std::isfinite(edge.std_error)) return plain_mean;
        const double weight = 1 / (edge.std_error * edge.std_error);
        sum += weight * edge.value;
        weights += weight;
    }
    return sum / weights;
}

Measured join(const std::vector<Measured>& edges, double step, double declared_sigma,
              double nonlinearity) {
    if (edges.size() == 1) return edges.front();
    const Bound bound = joint_bound(edges);
    const auto extreme =
        std::minmax_element(edges.begin(), edges.end(),
                            [](const Measured& a, const Measured& b) { return a.value < b.value; });
    const bool all_bounds = std::all_of(edges.begin(), edges.end(),
                                        [&](const Measured& each) { return each.bound == bound; });
    if (all_bounds && bound == Bound::at_most) return *extreme.second;
    if (all_bounds && bound == Bound::at_least) return *extreme.first;

    const Spread spread = spread_of(edges);
    const auto other = bound == Bound::at_most ? Bound::at_least : Bound::at_most;
    if (bound != Bound::exact && std::any_of(edges.begin(), edges.end(), [&](const Measured& each) {
            return each.bound == other;
        })) {
        return {spread.mean, infinity, Bound::exact};
    }
    double inverse_variances = 0;
    for (const auto& edge : edges) inverse_variances += 1 / (edge.std_error * edge.std_error);
    const auto count = static_cast<double>(edges.size());
    const double stated = std::isfinite(inverse_variances) ? count / inverse_variances : 0;
    const double lasting = std::max(lasting_variance(step, std::min(declared_sigma, spread.sigma)),
                                    std::min(stated, 0.25 * nonlinearity * nonlinearity));
    const double passing = std::max({stated - lasting, spread.sigma * spread.sigma, 0.0});
    return {weighted_mean(edges, spread.mean), std::sqrt(lasting + passing / count), bound};
}

void join_edge(Reading& mean, std::span<const Reading> readings, Edge edge, double step,
               double sigma, double nonlinearity = 0) {
    std::vector<Measured> edges;
    for (const auto& reading : readings) {
        if (reading.status != Status::void_reading && reading.*edge) {
            edges.push_back(*(reading.*edge));
        }
    }
    mean.*edge = std::nullopt;
    if (!edges.empty()) mean.*edge = join(edges, step, sigma, nonlinearity);
}

void join_slope(Reading& mean, std::span<const Reading> readings, Measured EdgeSlopes::* slope) {
    std::vector<Measured> told;
    for (const auto& reading : readings) {
        if (reading.status == Status::void_reading || !reading.slopes) continue;
        const Measured& each = (*reading.slopes).*slope;
        if (each.bound == Bound::exact) told.push_back(each);
    }
    if (told.empty()) {
        (*mean.slopes).*slope = {0, 0, Bound::at_least};
        return;
    }
    const auto surest = std::min_element(
        told.begin(), told.end(),
        [](const Measured& a, const Measured& b) { return a.std_error < b.std_error; });
    (*mean.slopes).*
        slope = {weighted_mean(told, spread_of(told).mean), surest->std_error, Bound::exact};
}

void join_slopes(Reading& mean, std::span<const Reading> readings) {
    const bool any = std::any_of(readings.begin(), readings.end(), [](const Reading& reading) {
        return reading.status != Status::void_reading && reading.slopes;
    });
    mean.slopes.reset();
    if (!any) return;
    mean.slopes.emplace();
    for (const auto slope :
         {&EdgeSlopes::up_mv, &EdgeSlopes::down_mv, &EdgeSlopes::left_ui, &EdgeSlopes::right_ui}) {
        join_slope(mean, readings, slope);
    }
}

// Over the bits; nothing unless every reading has one.
std::optional<double> joint_centre(std::span<const Reading> readings) {
    double errors = 0, bits = 0;
    for (const auto& reading : readings) {
        if (reading.status == Status::void_reading) continue;
        if (!reading.centre_error_ratio) return std::nullopt;
        const double weight = std::max(static_cast<double>(reading.bit_count), 1.0);
        errors += weight * *reading.centre_error_ratio;
        bits += weight;
    }
    if (!(bits > 0)) return std::nullopt;
    return errors / bits;
}

Status joint_status(const Reading& mean) {
    bool closed = false, saturated = false;
    for (Edge edge : {&Reading::up_mv, &Reading::down_mv, &Reading::left_ui, &Reading::right_ui,
                      &Reading::height_mv, &Reading::width_ui}) {
        if (!(mean.*edge)) continue;
        const auto& [value, std_error, bound] = *(mean.*edge);
        closed = closed || bound == Bound::at_most || value < 0;
        saturated = saturated || bound == Bound::at_least;
    }
    return closed ? Status::closed : saturated ? Status::saturated : Status::open;
}

}  // namespace

double lasting_variance(double step, double sigma) {
    if (!(step > 0)) return 0;
    constexpr double pi = std::numbers::pi;
    const double turns = 2 * pi * std::max(sigma, 0.0) / step;
    const double c = turns * turns;
    double sum = 0;  // of exp(-c k^2) / k^2
    if (c < 0.4) {
        // The series converges too slowly here; its limit for small c, to better than 1e-10.
        sum = pi * pi / 6 - std::sqrt(pi * c) + c / 2;
    } else {
        for (int k = 1; k <= 10; ++k) sum += std::exp(-c * k * k) / (k * k);
    }
    return step * step * sum / (2 * pi * pi);
}

double systematic_mv(double edge_mv, double step_tolerance) {
    return std::abs(edge_mv) * std::max(step_tolerance, 0.0);
}

double edge_log_likelihood(const Measured& edge, double step, double sigma, double truth) {
    const bool latched = step > 0;
    const double half = latched ? 0.5 * step : 0;
    const double blur = latched ? sigma : std::hypot(edge.std_error, sigma);
    if (edge.bound == Bound::at_most) {
        return log_interval_likelihood(-infinity, edge.value, truth, blur);
    }
    if (edge.bound == Bound::at_least) {
        return log_interval_likelihood(edge.value - half, infinity, truth, blur);
    }
    if (latched) {
        return log_interval_likelihood(edge.value - half, edge.value + half, truth, blur);
    }
    if (!(blur > 0)) return truth == edge.value ? 0 : -infinity;
    const double away = (truth - edge.value) / blur;
    return -0.5 * away * away - std::log(blur) - 0.5 * std::log(2 * std::numbers::pi);
}

Score score_of(const Reading& reading, const Required& required) {
    Score score;
    score.basis = reading.basis;
    score.status = reading.status;
    score.value = score.low = -infinity;
    score.high = infinity;
    if (reading.status == Status::void_reading) return score;

    const Reading there = carried(reading, required);
    score.basis = there.basis;
    const auto sides = sides_of(there, required);
    if (!sides.empty()) score.value = score.low = infinity;
    const double z_low = normal_q(outside_each_limit);
    const double z_high =
        normal_q(outside_each_limit / static_cast<double>(std::max<std::size_t>(sides.size(), 1)));
    for (const auto& [part, share] : sides) {
        if (share < score.value) {
            score.value = share;
            score.std_error = part.std_error;
            score.bound = part.bound;
        }
        const bool no_floor = part.bound == Bound::at_most;
        score.low = std::min(score.low, no_floor ? -infinity : part.value - z_low * part.std_error);
        if (part.bound != Bound::at_least) {
            score.high = std::min(score.high, part.value + z_high * part.std_error);
        }
    }
    if (reading.status == Status::no_lock) {
        score.value = score.low = -infinity;
        score.bound = Bound::at_most;
        if (!std::isfinite(score.high)) score.high = 0;
    }
    return score;
}

Reading mean_of(std::span<const Reading> readings, const MonitorNoise& noise) {
    Reading mean;
    bool lost_lock = false;
    double cost = 0;
    std::uint64_t bits = 0;
    for (const auto& reading : readings) {
        if (reading.status == Status::void_reading) continue;
        lost_lock = lost_lock || reading.status == Status::no_lock;
        if (mean.status == Status::void_reading) mean = reading;
        // The weakest claim among them holds for the whole.
        if (reading.basis == Basis::extrapolated) mean.basis = Basis::extrapolated;
        mean.error_definition = std::max(mean.error_definition, reading.error_definition);
        mean.error_ratio = std::max(mean.error_ratio, reading.error_ratio);
        mean.centred_assumed = mean.centred_assumed || reading.centred_assumed;
        cost += reading.cost_s;
        bits += reading.bit_count;
    }
    if (mean.status == Status::void_reading) return mean;
    mean.cost_s = cost;
    mean.bit_count = bits;
    mean.counts.clear();
    mean.centre_error_ratio = joint_centre(readings);
    join_slopes(mean, readings);
    const double opening = std::numbers::sqrt2;  // both edges blur an opening
    join_edge(mean, readings, &Reading::up_mv, noise.height_step_mv, noise.height_sigma_mv,
              noise.height_nonlinearity_mv);
    join_edge(mean, readings, &Reading::down_mv, noise.height_step_mv, noise.height_sigma_mv,
              noise.height_nonlinearity_mv);
    join_edge(mean, readings, &Reading::left_ui, noise.width_step_ui, noise.width_sigma_ui,
              noise.width_nonlinearity_ui);
    join_edge(mean, readings, &Reading::right_ui, noise.width_step_ui, noise.width_sigma_ui,
              noise.width_nonlinearity_ui);
    join_edge(mean, readings, &Reading::height_mv, noise.height_step_mv,
              opening * noise.height_sigma_mv);
    join_edge(mean, readings, &Reading::width_ui, noise.width_step_ui,
              opening * noise.width_sigma_ui);
    mean.status = lost_lock ? Status::no_lock : joint_status(mean);
    return mean;
}

}  // namespace lanewright
