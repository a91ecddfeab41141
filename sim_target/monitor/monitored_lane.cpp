#include "sim_target/monitor/monitored_lane.hpp"

#include <algorithm>
#include <cmath>
#include <cstdlib>
#include <iostream>

#include "sim_target/monitor/binomial.hpp"
#include "sim_target/physics/crossing.hpp"
#include "sim_target/physics/gaussian.hpp"

namespace lanewright::sim {

namespace {

constexpr std::size_t most_solved = 3;
// A latched edge may lie as far from the centre as its counter reaches and the origin is off.
constexpr int latched_allowance = 64;
constexpr std::uint64_t looks_at_risk = 8;  // an event strikes one of the first looks
// Less than this of the way to a new value left over: it is there.
constexpr double settled_share = 1e-4;
constexpr double widest_with_crossing = 0.9;
constexpr double far_outside = 0.2;

// Every other group of sixteen offsets, and of eight phases, like the squares of a chessboard.
bool misses_half(const MonitorPoint& point) {
    return (std::abs(point.offset) / 16 + std::abs(point.phase) / 8) % 2 == 0;
}

FourCodes four(const std::vector<int>& codes) {
    return {codes.at(0), codes.at(1), codes.at(2), codes.at(3)};
}

MonitorAxis offset_axis_of(const TargetFile& target, std::uint64_t lane) {
    const MonitorOptions& monitor = target.monitor;
    const int reach = std::max(MonitoredLane::offset_reach, monitor.height_steps_max);
    return MonitorAxis({monitor.height_step_mv, monitor.offset_sigma_mv, monitor.gain_tolerance,
                        monitor.nonlinearity_steps, reach + latched_allowance},
                       KeyedRandom(target.seed, Purpose::monitor_fixed, {lane, 0}),
                       KeyedRandom(target.seed, Purpose::monitor_position, {lane, 0}));
}

MonitorAxis phase_axis_of(const TargetFile& target, std::uint64_t lane) {
    const MonitorOptions& monitor = target.monitor;
    const int reach = std::max(MonitoredLane::phase_reach, monitor.width_steps_max);
    return MonitorAxis({monitor.width_step_ui, monitor.phase_sigma_ui, monitor.gain_tolerance,
                        monitor.nonlinearity_steps, reach + latched_allowance},
                       KeyedRandom(target.seed, Purpose::monitor_fixed, {lane, 1}),
                       KeyedRandom(target.seed, Purpose::monitor_position, {lane, 1}));
}

double deviate_of(double share) {
    return gaussian_tail_inverse(std::clamp(share, 1e-300, 1.0 - 1e-12));
}

}  // namespace

MonitoredLane::MonitoredLane(const TargetFile& target, int lane)
    : oracle_(target, lane),
      options_(target.monitor),
      chip_(target.chip),
      seed_(target.seed),
      lane_(static_cast<std::uint64_t>(lane)),
      bit_rate_hz_(target.grid.bit_rate_hz),
      out_of_sync_(FailureSwitches::holds(chip_.failures.out_of_sync, lane)),
      inverted_(FailureSwitches::holds(chip_.failures.inverted, lane)),
      too_few_(FailureSwitches::holds(chip_.failures.too_few_errors, lane)),
      not_monotone_(FailureSwitches::holds(chip_.failures.not_monotone, lane)),
      wrong_bits_(FailureSwitches::holds(chip_.failures.wrong_bits, lane)),
      loops_off_(FailureSwitches::holds(chip_.failures.loops_off, lane)),
      offset_(offset_axis_of(target, lane_)),
      phase_(phase_axis_of(target, lane_)),
      history_(options_, chip_, seed_, lane) {}

MonitoredLane::Solved& MonitoredLane::solved(const std::vector<int>& codes) {
    const auto found = std::find_if(solved_.begin(), solved_.end(),
                                    [&](const Solved& one) { return one.codes == codes; });
    if (found == solved_.end()) {
        Solved made{codes, oracle_.probe(codes), 1};
        made.spread_ui = made.eye->crossing_spread_ui();
        // A waveform without a median crossing or a cursor gives nothing to lock to.
        if (!(made.spread_ui < widest_with_crossing) &&
            !made.eye->margins(options_.error_ratio, {}).locked) {
            made.spread_ui = std::numeric_limits<double>::infinity();
        }
        if (solved_.size() >= most_solved) solved_.pop_back();
        solved_.push_front(std::move(made));
    } else if (found != solved_.begin()) {
        std::rotate(solved_.begin(), found, found + 1);
    }
    return solved_.front();
}

void MonitoredLane::number(std::uint64_t ordinal, bool beside) {
    ordinal_ = ordinal;
    beside_ = beside;
    begun_ = false;
    history_.restart();
}

bool MonitoredLane::take(const std::vector<int>& codes, bool loops_held) {
    history_.restart();
    codes_ = codes;
    held_ = loops_held;
    begun_ = false;
    return history_.locks(four(codes), solved(codes).spread_ui);
}

bool MonitoredLane::put(const std::vector<int>& codes, bool loops_held) {
    const bool locked = take(codes, loops_held);
    if (!locked) history_.missed_lock();
    return locked;
}

// Else a reading taken again after a reset would not be the one that the reset made void.
bool MonitoredLane::fall_back(const std::vector<int>& codes) {
    return take(codes, false);
}

// A reading begins with its first look: numbers and codes are also written when a board is put back
// as it was, and nothing follows from that.
const Standing& MonitoredLane::standing() {
    if (!begun_) {
        history_.begin(ordinal_, four(codes_), solved(codes_).spread_ui, held_ && !loops_off_,
                       beside_);
        begun_ = true;
    }
    return *history_.current();
}

Moment MonitoredLane::moment(const Standing& now, const LookTime& time) const {
    Moment moment;
    moment.phase_ui = now.landing_ui + chip_.lock.wander_sigma_ui * now.wander;
    moment.gain = now.return_gain;
    moment.offset_mv = now.return_offset_mv;
    const double settle_s = chip_.write_effects.settle_time_s * chip_.failures.settle_times;
    if (now.changed && settle_s > 0) {
        const double left = std::exp(-time.since_strobe_s / settle_s);
        if (left > settled_share) moment.offset_mv += chip_.write_effects.settle_mv * left;
    }
    if (time.in_parallel) moment.offset_mv += chip_.failures.parallel_offset_mv;
    return moment;
}

MonitoredLane::Event MonitoredLane::event(const Standing& now) const {
    KeyedRandom random(seed_, Purpose::monitor_event, {lane_, now.ordinal});
    Event event;
    if (random.uniform() >= options_.event_share) return event;
    event.mishap = random.uniform() < 0.5 ? Mishap::burst : Mishap::slip;
    event.size = random.uniform();
    event.look = static_cast<std::uint64_t>(random.uniform() * looks_at_risk);
    return event;
}

std::vector<std::uint64_t> MonitoredLane::key_of(const Standing& now,
                                                 std::initializer_list<std::uint64_t> words) const {
    std::vector<std::uint64_t> key{lane_, now.ordinal};
    for (const int code : now.codes) key.push_back(static_cast<std::uint64_t>(code));
    key.insert(key.end(), words);
    return key;
}

void MonitoredLane::charge(std::uint64_t look, std::uint64_t bits) {
    history_.charge((look == 0 ? options_.settle_s : 0) + options_.per_look_s +
                    static_cast<double>(bits) / bit_rate_hz_);
}

// Nothing to latch without lock or pattern, in a slip, or in a closed eye.
std::optional<Margins> MonitoredLane::edges_to_latch(const Standing& now, const LookTime& time,
                                                     double error_ratio, std::uint64_t bits) {
    const bool checker_fails =
        options_.against == ErrorsAgainst::pattern && (out_of_sync_ || inverted_);
    if (!now.locked || !time.has_lock || checker_fails) return std::nullopt;
    if (event(now).mishap == Mishap::slip) return std::nullopt;
    double shown = error_ratio > 0 ? error_ratio : options_.error_ratio;
    if (bits > 0) shown = std::max(shown, 1.0 / static_cast<double>(bits));
    const Margins truth = solved(codes_).eye->margins(std::min(shown, 0.1), moment(now, time));
    if (truth.closed || !truth.locked) return std::nullopt;
    return truth;
}

LatchedEdges MonitoredLane::latch(const LookTime& time, double error_ratio, std::uint64_t bits) {
    const Standing& now = standing();
    const auto look = history_.next_look(0, 0, 0);
    charge(look.index, bits);
    const std::optional<Margins> truth = edges_to_latch(now, time, error_ratio, bits);
    if (!truth) return {.closed = true};

    const Event strikes = event(now);
    const bool burst = strikes.mishap == Mishap::burst && look.index == 0;
    const int struck = burst ? static_cast<int>(strikes.size * 4) : -1;
    const auto steps = [&](int number, const MonitorAxis& axis, double place, double off,
                           double sigma, int top) {
        const std::vector<std::uint64_t> key =
            key_of(now, {look.nth, static_cast<std::uint64_t>(number)});
        KeyedRandom random(seed_, Purpose::latched_edge, key);
        const double seen =
            place - chip_.failures.repeatability_times * (off + sigma * random.normal());
        const double way = axis.position(seen) - axis.origin();
        double whole = std::round(place < 0 ? -way : way);
        if (number == struck) whole -= 1 + std::floor(8 * random.uniform());
        return static_cast<int>(std::clamp(whole, 0.0, static_cast<double>(top)));
    };
    const double offset_drift = options_.height_drift_mv * now.offset_drift;
    const double phase_drift = options_.width_drift_ui * now.phase_drift;
    const auto height = [&](int number, double place) {
        return steps(number, offset_, place, offset_drift, options_.height_sigma_mv,
                     options_.height_steps_max);
    };
    const auto width = [&](int number, double place) {
        return steps(number, phase_, place, phase_drift, options_.width_sigma_ui,
                     options_.width_steps_max);
    };
    const double half_ui = 0.5 * options_.deterministic_jitter_ui;
    return {.up = height(0, truth->up_mv),
            .down = height(1, -truth->down_mv),
            .left = width(2, std::min(-1e-9, half_ui - truth->left_ui)),
            .right = width(3, std::max(1e-9, truth->right_ui - half_ui)),
            .closed = false};
}

double MonitoredLane::counted_share(EyeProbe& eye, double phase_ui, double offset_mv,
                                    const Moment& moment) {
    const auto at = [&](double phase) {
        return options_.against == ErrorsAgainst::pattern
                   ? eye.error_ratio(phase, offset_mv, moment)
                   : eye.disagreement(phase, offset_mv, moment);
    };
    // Deterministic jitter as two places, each half of the time (dual-Dirac model, INCITS
    // TR-35-2004, from memory).
    const double half_ui = 0.5 * options_.deterministic_jitter_ui;
    const double share =
        half_ui > 0 ? 0.5 * (at(phase_ui - half_ui) + at(phase_ui + half_ui)) : at(phase_ui);
    return std::clamp(share, 0.0, 1.0);
}

double MonitoredLane::share_of_errors(const Standing& now, const LookTime& time,
                                      const MonitorPoint& point, KeyedRandom& random) {
    if (!now.locked || !time.has_lock) return 0.5;
    const bool against_pattern = options_.against == ErrorsAgainst::pattern;
    if (against_pattern && out_of_sync_) return 0.5;
    const double times = chip_.failures.repeatability_times;
    const double offset_mv =
        offset_.place(point.offset) + times * (options_.height_sigma_mv * random.normal() +
                                               options_.height_drift_mv * now.offset_drift);
    const double phase_ui =
        phase_.place(point.phase) + times * (options_.width_sigma_ui * random.normal() +
                                             options_.width_drift_ui * now.phase_drift);
    double share = counted_share(*solved(codes_).eye, phase_ui, offset_mv, moment(now, time));
    if (too_few_ && share > far_outside) share *= 0.3;
    if (not_monotone_ && share > far_outside && misses_half(point)) share *= 0.5;
    return against_pattern && inverted_ ? 1.0 - share : share;
}

CountedErrors MonitoredLane::count(const LookTime& time, const MonitorPoint& point,
                                   unsigned bits_log2) {
    const Standing& now = standing();
    const auto look = history_.next_look(point.offset, point.phase, bits_log2);
    CountedErrors counted;
    counted.bits_log2 = wrong_bits_ && bits_log2 >= 3 ? bits_log2 - 3 : bits_log2;
    const std::uint64_t bits = std::uint64_t{1} << counted.bits_log2;
    charge(look.index, bits);

    const std::vector<std::uint64_t> key =
        key_of(now, {static_cast<std::uint64_t>(static_cast<std::int64_t>(point.offset)),
                     static_cast<std::uint64_t>(static_cast<std::int64_t>(point.phase)), bits_log2,
                     look.nth});
    KeyedRandom placing(seed_, Purpose::monitor_look, key);
    double share = share_of_errors(now, time, point, placing);
    const Event strikes = event(now);
    const bool struck = strikes.mishap != Mishap::none && strikes.look == look.index;
    if (struck && strikes.mishap == Mishap::slip) share = 0.5;
    KeyedRandom counting(seed_, Purpose::counted_errors, key);
    counted.errors = binomial(bits, share, counting);
    if (struck && strikes.mishap == Mishap::burst) {
        const auto more = static_cast<std::uint64_t>(std::exp2(4.0 + 8.0 * strikes.size));
        counted.errors = std::min(bits, counted.errors + more);
    }
    return counted;
}

double MonitoredLane::nominal_ratio(const std::vector<int>& codes, double offset_steps,
                                    double phase_steps) {
    return counted_share(*solved(codes).eye, phase_.place(phase_steps), offset_.place(offset_steps),
                         {});
}

// Outwards until more than the ratio is counted, then where exactly; in steps from the origin.
double MonitoredLane::edge(const std::vector<int>& codes, double error_ratio,
                           const MonitorPoint& way) {
    const MonitorPoint from = origin();
    const double wanted = deviate_of(error_ratio);
    const auto spare = [&](double steps) {
        return deviate_of(nominal_ratio(codes, from.offset + way.offset * steps,
                                        from.phase + way.phase * steps)) -
               wanted;
    };
    const bool height = way.offset != 0;
    const double reach =
        height ? offset_reach - from.offset * way.offset : phase_reach - from.phase * way.phase;
    const double stride = height ? 8 : 2;
    CurvePoint inside{0, spare(0)};
    while (inside.x < reach) {
        const double x = std::min(reach, inside.x + stride);
        const CurvePoint next{x, spare(x)};
        if (next.y <= 0) return crossing(spare, inside, next, 1e-4);
        inside = next;
    }
    return reach;
}

NominalEdges MonitoredLane::nominal_edges(const std::vector<int>& codes, double error_ratio) {
    NominalEdges edges;
    const MonitorPoint from = origin();
    edges.centre_error_ratio = nominal_ratio(codes, from.offset, from.phase);
    edges.closed = !(edges.centre_error_ratio < error_ratio);
    if (edges.closed) return edges;
    edges.up_mv = offset_.step() * edge(codes, error_ratio, {1, 0});
    edges.down_mv = offset_.step() * edge(codes, error_ratio, {-1, 0});
    edges.left_ui = phase_.step() * edge(codes, error_ratio, {0, -1});
    edges.right_ui = phase_.step() * edge(codes, error_ratio, {0, 1});
    return edges;
}

std::vector<std::unique_ptr<LaneModel>> make_lane_models(const TargetFile& target) {
    std::vector<int> behind;
    for (std::size_t lane = 0; lane < target.lanes.size(); ++lane) {
        behind.push_back(static_cast<int>(lane));
    }
    for (const auto& [one, other] : target.chip.failures.swapped) {
        std::swap(behind.at(one), behind.at(other));
    }
    std::vector<std::unique_ptr<LaneModel>> models;
    for (const int lane : behind) {
        auto made = std::make_unique<MonitoredLane>(target, lane);
        const std::string& note = made->oracle().channel_note();
        if (!note.empty()) std::cerr << "lane " << lane << ": " << note << '\n';
        models.push_back(std::move(made));
    }
    return models;
}

}  // namespace lanewright::sim
