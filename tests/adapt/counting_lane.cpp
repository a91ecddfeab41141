#include "tests/adapt/counting_lane.hpp"

#include <algorithm>
#include <cmath>

#include "adapt/stats/normal.hpp"
#include "adapt/stats/random.hpp"

namespace lanewright::tests {
namespace {

// What a draw is for, so that no two share a key.
enum Purpose : std::uint32_t {
    shape_of_lane = 1,
    position_off,
    errors_counted,
    monitor_shift,
    spoilt
};

std::uint64_t binomial(double bits, double chance, Random& random) {
    const double mean = bits * chance;
    if (mean > 400) {
        const double sigma = std::sqrt(mean * (1 - chance));
        return static_cast<std::uint64_t>(
            std::llround(std::clamp(mean + sigma * random.normal(), 0.0, bits)));
    }
    if (chance > 0.02) {
        std::uint64_t errors = 0;
        for (double bit = 0; bit < bits; ++bit) errors += random.uniform() < chance ? 1 : 0;
        return errors;
    }
    // A small chance: a Poisson value, by inversion.
    double left = random.uniform();
    double term = std::exp(-mean);
    std::uint64_t errors = 0;
    while (left > term && term >= 0 && errors < 2000) {
        left -= term;
        ++errors;
        term *= mean / static_cast<double>(errors);
    }
    return errors;
}

double log_uniform(Random& random, double low, double high) {
    return low * std::pow(high / low, random.uniform());
}

}  // namespace

double CountingLane::lost(double below_mv) const {
    const std::size_t patterns = std::size_t{1} << interference_mv.size();
    double sum = 0;
    for (std::size_t pattern = 0; pattern < patterns; ++pattern) {
        double level = level_mv;
        for (std::size_t i = 0; i < interference_mv.size(); ++i) {
            level += (pattern >> i & 1U) != 0 ? interference_mv[i] : -interference_mv[i];
        }
        sum += normal_tail((level - below_mv) / noise_mv);
    }
    return sum / static_cast<double>(patterns);
}

double CountingLane::height_ratio(double offset_mv) const {
    const double threshold = decision_mv + offset_mv;
    const double pattern = 0.5 * (lost(threshold) + lost(-threshold));
    if (definition == ErrorDefinition::pattern) return pattern;
    // What lies between the two thresholds is decided in two ways.
    return 0.5 * (std::abs(lost(threshold) - lost(decision_mv)) +
                  std::abs(lost(-threshold) - lost(-decision_mv)));
}

double CountingLane::width_ratio(double phase_ui) const {
    double sum = 0;
    for (const double way : {-0.5, 0.5}) {
        const double moved = way * deterministic_jitter_ui;
        sum += normal_tail((0.5 + phase_ui + moved) / random_jitter_ui) +
               normal_tail((0.5 - phase_ui + moved) / random_jitter_ui);
    }
    return 0.25 * sum;  // half the bits have a transition on either side
}

double CountingLane::moved(double steps, std::uint32_t axis) const {
    const auto off = [&](double position) {
        const auto key = static_cast<std::uint32_t>(static_cast<std::int32_t>(position) + 4096);
        return nonlinearity_steps * Random({seed, lane, position_off * 8 + axis, key}).normal();
    };
    if (nonlinearity_steps == 0) return gain * steps;
    const double below = std::floor(steps);
    const double part = steps - below;
    return gain * steps + (1 - part) * off(below) + (part > 0 ? part * off(below + 1) : 0);
}

double CountingLane::ratio_at(const LookGrid& grid, double offset_steps, double phase_steps) const {
    const double height = height_ratio(moved(offset_steps, 0) * grid.offset_step_mv);
    if (phase_steps == 0) return height;
    return std::min(0.5, height + width_ratio(moved(phase_steps, 1) * grid.phase_step_ui));
}

double CountingLane::true_edge_steps(const LookGrid& grid, std::size_t direction,
                                     double ratio) const {
    const double sign = direction == 0 || direction == 3 ? 1 : -1;
    const auto at = [&](double steps) {
        return direction < 2 ? ratio_at(grid, sign * steps, 0) : ratio_at(grid, 0, sign * steps);
    };
    const double reach = direction < 2 ? grid.offset_most_steps : grid.phase_most_steps;
    double low = 0;
    while (low < reach && at(low + 1) < ratio) low += 1;
    if (low >= reach) return reach;
    double high = low + 1;
    for (int i = 0; i < 50; ++i) {
        const double middle = 0.5 * (low + high);
        (at(middle) < ratio ? low : high) = middle;
    }
    return low;
}

double CountingLane::true_level_mv(std::size_t side, double ratio) const {
    double low = -1000, high = 1000;
    for (int i = 0; i < 80; ++i) {
        const double middle = 0.5 * (low + high);
        (lost(middle) < ratio ? low : high) = middle;
    }
    return side == 0 ? low - decision_mv : low + decision_mv;
}

double CountingLane::centre_ratio() const {
    return height_ratio(0);
}

Count CountingLane::count(const LookGrid& grid, const Look& look, std::uint32_t nth,
                          const Shift& shift) const {
    const double offset = look.offset_mv / grid.offset_step_mv;
    const double phase = look.phase_ui / grid.phase_step_ui;
    const double ratio = ratio_at(grid, offset == 0 ? 0 : offset + shift.offset_steps,
                                  phase == 0 ? 0 : phase + shift.phase_steps);
    Random random({seed, lane, errors_counted, nth});
    Count count{look, binomial(static_cast<double>(look.bits), ratio, random), false};
    if (grid.most_errors > 0 && count.errors >= grid.most_errors) {
        count.errors = grid.most_errors;
        count.saturated = true;
    }
    return count;
}

CountingLane drawn_lane(EdgeShape shape, std::uint64_t seed, std::uint32_t number, double ratio) {
    Random random({seed, number, shape_of_lane, 0});
    CountingLane lane;
    lane.seed = seed;
    lane.lane = number;
    lane.noise_mv = log_uniform(random, 1.5, 8);
    double worst = 0;
    const std::size_t taps = shape == EdgeShape::gaussian     ? 0
                             : shape == EdgeShape::two_diracs ? 1
                                                              : 2 + random.below(5);
    for (std::size_t i = 0; i < taps; ++i) {
        lane.interference_mv.push_back(lane.noise_mv * log_uniform(random, 0.2, 3));
        worst += lane.interference_mv.back();
    }
    lane.level_mv = log_uniform(random, 8, 120) + worst + normal_q(ratio) * lane.noise_mv;
    lane.decision_mv = 2 * random.normal();
    lane.random_jitter_ui = log_uniform(random, 0.006, 0.03);
    lane.deterministic_jitter_ui =
        0.1 + (shape == EdgeShape::gaussian ? 0 : 0.3 * random.uniform());
    lane.gain = 1 + 0.05 * random.normal();
    return lane;
}

LookGrid demo_grid() {
    LookGrid grid;
    grid.offset_step_mv = 2;
    grid.phase_step_ui = 1.0 / 64;
    grid.offset_most_steps = 255;
    grid.phase_most_steps = 63;
    grid.least_bits = 1024;
    grid.most_bits = std::uint64_t{1} << 40;
    grid.most_errors = (std::uint64_t{1} << 24) - 1;
    return grid;
}

std::optional<CountedReading> read(const CountingLane& lane, const LookGrid& grid,
                                   const MarginWanted& wanted, std::uint32_t ordinal,
                                   std::size_t at_most) {
    Random random({lane.seed, lane.lane, monitor_shift, ordinal});
    CountingLane::Shift shift;
    shift.offset_steps = grid.offset_sigma_mv / grid.offset_step_mv * random.normal();
    shift.phase_steps = grid.phase_sigma_ui / grid.phase_step_ui * random.normal();
    Random fate({lane.seed, lane.lane, spoilt, ordinal});
    const bool spoils = fate.uniform() < lane.spoilt_readings;
    const std::size_t spoilt_look = fate.below(12);
    const bool slips = fate.below(2) == 0;
    EdgeSearch search(wanted, grid);
    CountedReading out;
    for (;;) {
        const auto looks = search.next(at_most);
        if (looks.empty()) break;
        std::vector<Count> counts;
        for (const Look& look : looks) {
            const auto nth = static_cast<std::uint32_t>(ordinal * 64 + out.looks++);
            counts.push_back(lane.count(grid, look, nth, shift));
            if (spoils && out.looks == spoilt_look + 1) {
                const std::uint64_t burst = slips ? look.bits / 2 : 2000 + fate.below(20'000);
                counts.back().errors = std::min(look.bits, counts.back().errors + burst);
            }
        }
        if (out.looks > grid.most_looks) return std::nullopt;
        ++out.rounds;
        search.told(counts);
    }
    const auto reading = search.result();
    if (!reading) return std::nullopt;
    out.reading = *reading;
    return out;
}

std::optional<double> least_error_steps(const CountingLane& lane, const LookGrid& grid,
                                        std::span<const Count> counts, std::size_t direction,
                                        double ratio) {
    const bool vertical = direction < 2;
    const double sign = direction == 0 || direction == 3 ? 1 : -1;
    const double edge = lane.true_edge_steps(grid, direction, ratio);
    const auto ratio_there = [&](double steps) {
        return vertical ? lane.ratio_at(grid, sign * steps, 0)
                        : lane.ratio_at(grid, 0, sign * steps);
    };
    // The slope as it is at the edge, not between single positions.
    CountingLane even = lane;
    even.nonlinearity_steps = 0;
    const auto q_even = [&](double steps) {
        return normal_q(vertical ? even.ratio_at(grid, sign * steps, 0)
                                 : even.ratio_at(grid, 0, sign * steps));
    };
    const double fall = q_even(edge - 0.25) - q_even(edge + 0.25);
    const double slope = 2 * fall;
    const double off =
        slope * (vertical ? grid.offset_nonlinearity_steps : grid.phase_nonlinearity_steps);
    struct Place {
        double steps = 0, information = 0;
    };
    std::vector<Place> places;
    for (const Count& count : counts) {
        const double along = vertical ? count.look.offset_mv / grid.offset_step_mv
                                      : count.look.phase_ui / grid.phase_step_ui;
        const double across = vertical ? count.look.phase_ui : count.look.offset_mv;
        if (across != 0 || along * sign <= 0) continue;
        const double steps = std::round(along * sign);
        const double p = ratio_there(steps);
        if (p > 0.1 || p < 1e-30) continue;  // no line any more; or nothing to see
        const double q = normal_q(p);
        const double density = std::exp(-0.5 * q * q) / std::sqrt(2 * 3.141592653589793);
        const double information =
            static_cast<double>(count.look.bits) * density * density / (p * (1 - p));
        const auto same = std::find_if(places.begin(), places.end(),
                                       [&](const Place& each) { return each.steps == steps; });
        if (same != places.end()) {
            same->information += information;
        } else {
            places.push_back({steps, information});
        }
    }
    // Generalised least squares of a line, and the best prediction of what the monitor shows at
    // the edge.
    double s00 = 0, s01 = 0, s11 = 0, c0 = 0, c1 = 0, known = 0;
    const auto weight_of = [&](double steps) { return std::max(0.0, 1 - std::abs(edge - steps)); };
    for (const Place& place : places) {
        const double inverse = 1 / (1 / std::max(place.information, 1e-12) + off * off);
        const double u = place.steps - edge;
        const double with = off * off * weight_of(place.steps);
        s00 += inverse;
        s01 += inverse * u;
        s11 += inverse * u * u;
        c0 += inverse * with;
        c1 += inverse * with * u;
        known += inverse * with * with;
    }
    const double determinant = s00 * s11 - s01 * s01;
    if (!(determinant > 1e-9 * s00 * s11) || places.size() < 2) return std::nullopt;
    const double part = edge - std::floor(edge);
    const double prior = off * off * (part * part + (1 - part) * (1 - part));
    const double a = 1 - c0, b = -c1;
    const double trend = (a * a * s11 - 2 * a * b * s01 + b * b * s00) / determinant;
    const double sigma = vertical ? grid.offset_sigma_mv / grid.offset_step_mv
                                  : grid.phase_sigma_ui / grid.phase_step_ui;
    return std::hypot(std::sqrt(std::max(prior - known + trend, 0.0)) / slope, sigma);
}

}  // namespace lanewright::tests
