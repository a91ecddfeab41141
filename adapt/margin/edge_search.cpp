#include "adapt/margin/edge_search.hpp"

#include <algorithm>
#include <array>
#include <bit>
#include <cmath>

#include "adapt/margin/closed_fit.hpp"
#include "adapt/margin/edge_side.hpp"
#include "adapt/stats/normal.hpp"
#include "adapt/stats/q_scale.hpp"
#include "adapt/stats/sequential.hpp"

namespace lanewright {
namespace {

constexpr double least_errors = 20;  // at the ratio stated, for it to count as counted
constexpr std::size_t up = 0, down = 1, left = 2, right = 3;

// What the monitor can dwell on, at most so many bits where that can be.
double allowed_bits(double bits, const LookGrid& grid) {
    const auto least = static_cast<double>(std::max<std::uint64_t>(grid.least_bits, 1));
    const auto most = grid.most_bits > 0 ? static_cast<double>(grid.most_bits) : 0x1p62;
    bits = std::clamp(std::floor(bits), least, std::max(least, std::min(most, 0x1p62)));
    if (!grid.bits_by_powers_of_two) return bits;
    const double power = std::exp2(std::floor(std::log2(bits)));
    return power < least ? 2 * power : power;
}

// A sixth of the dwell: four long looks and as many short ones with some left for second thoughts.
double longest_look(const MarginWanted& wanted, const LookGrid& grid) {
    return allowed_bits(static_cast<double>(wanted.dwell_bits) / 6, grid);
}

double sane_ratio(double ratio) {
    return ratio > 0 ? std::min(ratio, 0.01) : 0.01;
}

LookPlan plan_of(const MarginWanted& wanted, const LookGrid& grid) {
    LookPlan plan;
    plan.ratio = counted_ratio(wanted, grid);
    plan.wanted_q = normal_q(plan.ratio);
    plan.decade_q = normal_q(10 * plan.ratio);
    plan.long_bits = longest_look(wanted, grid);
    plan.goal_errors = std::clamp(plan.long_bits * plan.ratio, 100.0, 2500.0);
    if (grid.most_errors > 0) {
        // A counter at its top tells little.
        plan.goal_errors = std::min(plan.goal_errors, 0.5 * static_cast<double>(grid.most_errors));
    }
    const double least = RatioTest(plan.ratio, 10 * plan.ratio).bits_without_error();
    const double ample = std::min(10 * least, static_cast<double>(wanted.dwell_bits) / 200);
    plan.short_bits = std::min(std::max(least, ample), plan.long_bits);
    return plan;
}

}  // namespace

double counted_ratio(const MarginWanted& wanted, const LookGrid& grid) {
    double ratio = sane_ratio(wanted.error_ratio);
    const double longest = longest_look(wanted, grid);
    while (ratio * longest < least_errors && ratio < 0.001) ratio *= 10;
    return ratio;
}

struct EdgeSearch::State {
    MarginWanted wanted;
    LookGrid grid;
    LookPlan plan;
    std::array<EdgeSide, 4> sides;
    EdgeLooks centre;
    std::vector<Count> counts;
    double bits_left = 0;
    std::vector<Look> planned;

    State(const MarginWanted& asked, const LookGrid& with)
        : wanted(asked), grid(with), plan(plan_of(asked, with)) {
        bits_left = static_cast<double>(wanted.dwell_bits);
        const EdgeSide::Range height = height_range(), width = width_range();
        for (std::size_t i = 0; i < sides.size(); ++i) {
            sides[i] = EdgeSide(plan, i <= down ? height : width);
            const double expected = expected_steps(i);
            if (expected > 0) sides[i].expect(expected, 0);
        }
        make_plan();
    }

    EdgeSide::Range height_range() const {
        EdgeSide::Range range;
        range.reach = std::max(grid.offset_most_steps, 1);
        range.first_steps = std::max(0.1 * range.reach, 1.0);
        range.likely_most = range.reach;
        range.step = grid.offset_step_mv;
        range.sigma = grid.offset_sigma_mv;
        range.nonlinearity_steps = grid.offset_nonlinearity_steps;
        range.sees_centre = sees_centre();
        return range;
    }
    EdgeSide::Range width_range() const {
        EdgeSide::Range range = height_range();
        range.reach = std::max(grid.phase_most_steps, 1);
        range.step = grid.phase_step_ui;
        range.sigma = grid.phase_sigma_ui;
        range.nonlinearity_steps = grid.phase_nonlinearity_steps;
        // Half a unit interval to either side, with some room for a sampler off the middle.
        const double half = range.step > 0 ? 0.5 / range.step : range.reach;
        range.first_steps = std::clamp(0.5 * half, 1.0, double(range.reach));
        range.likely_most = static_cast<std::int32_t>(std::clamp(half, 1.0, double(range.reach)));
        return range;
    }

    bool sees_centre() const { return grid.error_definition == ErrorDefinition::pattern; }
    double step_of(std::size_t side) const {
        return side <= down ? grid.offset_step_mv : grid.phase_step_ui;
    }

    double expected_steps(std::size_t side) const {
        const Expected& edges = wanted.expected;
        const std::array<double, 4> all{edges.up_mv, edges.down_mv, edges.left_ui, edges.right_ui};
        const double steps = step_of(side) > 0 ? all[side] / step_of(side) : 0;
        return std::isfinite(steps) ? steps : 0;
    }

    const Seen* at_centre() const { return centre.at(0); }

    // The eye is closed where the centre shows it: long before an edge is looked for in vain.
    bool closed() const {
        const Seen* seen = at_centre();
        if (seen == nullptr || !sees_centre() || !(seen->ratio() > plan.ratio)) return false;
        const RatioTest test(plan.ratio, 10 * plan.ratio);
        const auto errors = static_cast<std::uint64_t>(seen->errors);
        return test.judge(errors, seen->bits) == Leaning::high || centre_is_sure();
    }
    bool centre_is_sure() const {
        const Seen* seen = at_centre();
        return seen != nullptr && seen->bits * plan.ratio >= least_errors;
    }

    // ---- where to look next

    void want(std::size_t side, const Wish& wish) {
        if (counts.size() + planned.size() >= std::max<std::size_t>(grid.most_looks, 1)) return;
        const double bits = allowed_bits(std::min(wish.bits, plan.long_bits), grid);
        // At least one look is taken, however little dwell is granted.
        if (bits > bits_left && !(counts.empty() && planned.empty())) return;
        bits_left -= bits;
        Look look;
        look.bits = static_cast<std::uint64_t>(bits);
        const double steps = wish.steps == 0                 ? 0
                             : (side == up || side == right) ? wish.steps
                                                             : -wish.steps;
        (side <= down ? look.offset_mv : look.phase_ui) = steps * step_of(side);
        planned.push_back(look);
    }

    void make_plan() {
        for (const Look& look : planned) bits_left += static_cast<double>(look.bits);
        planned.clear();
        for (EdgeSide& side : sides) side.settle();
        closed() ? plan_closed() : plan_open();
    }

    // Down starts from up's edge and right from left's, where nothing else is expected.
    void share_between(std::size_t first, std::size_t second) {
        for (const auto& [from, to] : {std::pair(first, second), std::pair(second, first)}) {
            const auto& fit = sides[from].fit();
            if (!fit) continue;
            const double expected = expected_steps(to);
            sides[to].expect(expected > 0 ? expected : std::max(fit->edge_steps, 1.0),
                             fit->slope_known ? fit->fall : 0);
        }
    }

    void plan_open() {
        share_between(up, down);
        share_between(left, right);
        for (EdgeSide& side : sides) side.settle();
        if (sees_centre() && wants_centre()) {
            const bool first = at_centre() == nullptr;
            want(up, {0, first ? plan.short_bits : 2 * least_errors / plan.ratio});
        }
        struct Turn {
            std::size_t side;
            Wish wish;
            bool lost;  // nothing there tells a Q yet
        };
        std::vector<Turn> turns;
        for (std::size_t side = 0; side < sides.size(); ++side) {
            if (waits(side)) continue;
            if (const auto wish = sides[side].next()) {
                turns.push_back({side, *wish, !sides[side].fit()});
            }
        }
        // Where looks run out, those that know least come first.
        std::stable_sort(turns.begin(), turns.end(), [&](const Turn& a, const Turn& b) {
            if (a.lost != b.lost) return a.lost;
            return sides[a.side].taken() < sides[b.side].taken();
        });
        for (const Turn& turn : turns) want(turn.side, turn.wish);
    }

    // Once at the beginning where nothing is expected, and where an edge lies at the centre.
    bool wants_centre() const {
        if (at_centre() == nullptr) {
            if (counts.empty() && wanted.expected == Expected{}) return true;
            return std::any_of(sides.begin(), sides.end(),
                               [](const EdgeSide& side) { return side.collapsed(); });
        }
        return !centre_is_sure() &&
               std::any_of(sides.begin(), sides.end(),
                           [](const EdgeSide& side) { return side.collapsed(); });
    }

    // One of a pair waits for what the other teaches; the other leaves it some looks.
    bool waits(std::size_t side) const {
        const std::size_t other = side ^ 1U;
        if (expected_steps(side) > 0) return false;
        const bool second = (side & 1U) != 0;
        constexpr std::size_t patience = 5;
        const auto& fit = sides[other].fit();
        if (second && !sides[side].begun()) {
            if (sides[other].taken() >= patience || (fit && fit->slope_known)) return false;
            return expected_steps(other) > 0 || sides[other].next().has_value();
        }
        return !second && sides[side].taken() >= patience && !sides[other].begun();
    }

    void plan_closed() {
        const Seen& seen = *at_centre();
        const double enough = 4 * least_errors;
        if (seen.looks < 2) {
            // A slip of the checker looks like a closed eye; it does not come twice.
            want(up, {0, std::max(plan.short_bits, 1.5 * enough / seen.ratio())});
        } else if (seen.errors < enough && seen.bits < plan.long_bits) {
            want(up, {0, 1.5 * enough / seen.ratio()});
        }
        if (seen.ratio() > 0.25) return;  // no slope this near to half errors
        for (const std::size_t side : {up, down}) {
            if (const auto steps = slope_position(sides[side], seen.q)) {
                want(side, {*steps, 5 * enough / seen.ratio()});
            }
        }
    }

    // Where errors are clearly more than at the centre but clearly fewer than half.
    std::optional<std::int32_t> slope_position(const EdgeSide& side, double centre_q) const {
        constexpr std::size_t most_tries = 5;
        constexpr double clear_fall = 0.2, flat = 0.3;
        if (side.taken() >= most_tries) return std::nullopt;
        std::int32_t within = 0;  // too near to the centre
        std::int32_t beyond =
            2 * static_cast<std::int32_t>(std::ceil(0.5 * centre_q / side.likely_fall())) + 1;
        for (const Seen& each : side.looks().seen()) {
            if (each.steps == 0) continue;
            if (each.ratio() > flat) {
                beyond = std::min(beyond, each.steps);
            } else if (each.q > centre_q - clear_fall) {
                within = std::max(within, each.steps);
                beyond = std::max(beyond, 4 * each.steps);
            } else if (each.errors > 4 * least_errors) {
                return std::nullopt;  // told already
            } else {
                return each.steps;
            }
        }
        const std::int32_t steps = std::max(within + 1, (within + beyond) / 2);
        if (steps >= beyond || steps > grid.offset_most_steps) return std::nullopt;
        return steps;
    }

    // ---- what the counts say

    void take(const Count& count) {
        counts.push_back(count);
        Seen seen;
        seen.bits = static_cast<double>(count.look.bits);
        seen.errors = static_cast<double>(std::min(count.errors, count.look.bits));
        seen.at_least = count.saturated;
        if (!(seen.bits > 0)) return;
        if (count.look.offset_mv == 0 && count.look.phase_ui == 0) {
            centre.add(seen);
            for (EdgeSide& side : sides) side.add(seen);
            return;
        }
        const bool vertical = count.look.phase_ui == 0;
        const double along = vertical ? count.look.offset_mv : count.look.phase_ui;
        const std::size_t side = vertical ? (along > 0 ? up : down) : (along > 0 ? right : left);
        seen.steps = static_cast<std::int32_t>(std::lround(std::abs(along) / step_of(side)));
        sides[side].add(seen);
    }

    Reading blank() const {
        Reading reading;
        reading.error_ratio = plan.ratio;
        reading.error_definition = grid.error_definition;
        reading.counts = counts;
        for (const Count& count : counts) reading.bit_count += count.look.bits;
        return reading;
    }

    Reading open_reading() const {
        Reading reading = blank();
        reading.up_mv = sides[up].edge();
        reading.down_mv = sides[down].edge();
        reading.left_ui = sides[left].edge();
        reading.right_ui = sides[right].edge();
        reading.slopes = EdgeSlopes{sides[up].slope(), sides[down].slope(), sides[left].slope(),
                                    sides[right].slope()};
        reading.status = Status::open;
        for (const auto& edge :
             {reading.up_mv, reading.down_mv, reading.left_ui, reading.right_ui}) {
            if (edge->bound == Bound::at_least && reading.status == Status::open) {
                reading.status = Status::saturated;
            }
            if (edge->bound == Bound::at_most) reading.status = Status::closed;
        }
        return reading;
    }

    Reading closed_reading() const {
        const Seen& seen = *at_centre();
        Reading reading = blank();
        reading.status = Status::closed;
        reading.centre_error_ratio = seen.ratio();
        const double q = std::max(seen.q, 0.0);
        const double information = std::max(expected_information(seen.bits, seen.q), 1e-6);
        const double width = -0.5 * (plan.wanted_q - q) / plan.wanted_q;
        const double width_error =
            std::hypot(0.5 / (std::sqrt(information) * plan.wanted_q), grid.phase_sigma_ui);
        reading.left_ui = reading.right_ui = Measured{width, width_error, Bound::exact};
        const double width_slope = 0.5 * q / (plan.wanted_q * plan.wanted_q);
        EdgeSlopes slopes;
        slopes.left_ui = slopes.right_ui = {width_slope, width_error / plan.wanted_q, Bound::exact};
        const ClosedFit fit =
            fit_closed(sides[up].looks().seen(), sides[down].looks().seen(), plan.wanted_q);
        const double step = grid.offset_step_mv;
        if (fit.solved) {
            reading.up_mv =
                Measured{fit.up_steps * step, std::hypot(fit.up_error * step, grid.offset_sigma_mv),
                         Bound::exact};
            reading.down_mv =
                Measured{fit.down_steps * step,
                         std::hypot(fit.down_error * step, grid.offset_sigma_mv), Bound::exact};
            const double slope = step / fit.fall;
            slopes.up_mv =
                slopes.down_mv = {slope, slope * fit.fall_error / fit.fall, Bound::exact};
        } else {
            reading.up_mv = reading.down_mv = Measured{0, grid.offset_sigma_mv, Bound::at_most};
            slopes.up_mv = slopes.down_mv = {0, 0, Bound::at_least};
        }
        reading.slopes = slopes;
        return reading;
    }
};

EdgeSearch::EdgeSearch(const MarginWanted& wanted, const LookGrid& grid)
    : state_(std::make_unique<State>(wanted, grid)) {}
EdgeSearch::~EdgeSearch() = default;
EdgeSearch::EdgeSearch(EdgeSearch&&) noexcept = default;
EdgeSearch& EdgeSearch::operator=(EdgeSearch&&) noexcept = default;

std::vector<Look> EdgeSearch::next(std::size_t at_most) const {
    const auto& planned = state_->planned;
    const auto count =
        static_cast<std::ptrdiff_t>(std::min(std::max<std::size_t>(at_most, 1), planned.size()));
    return {planned.begin(), planned.begin() + count};
}

void EdgeSearch::told(std::span<const Count> counts) {
    if (counts.empty()) return;
    for (const Look& look : state_->planned) state_->bits_left += static_cast<double>(look.bits);
    state_->planned.clear();
    for (const Count& count : counts) {
        state_->take(count);
        state_->bits_left -= static_cast<double>(count.look.bits);
    }
    state_->make_plan();
}

std::optional<Reading> EdgeSearch::result() const {
    if (!state_->planned.empty()) return std::nullopt;
    return state_->closed() ? state_->closed_reading() : state_->open_reading();
}

}  // namespace lanewright
