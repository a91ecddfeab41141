#include "sim_target/board/chip.hpp"

#include <algorithm>
#include <cmath>
#include <numeric>
#include <utility>

namespace lanewright::sim {

namespace {

constexpr std::uint32_t most_dwell_log2 = 62;
constexpr std::uint32_t most_counted_log2 = 50;
constexpr int smallest_ratio_exponent = 18;
constexpr double lowest_temperature_c = -64;

}  // namespace

Chip::Chip(TimeSource& time, const BoardSide& side, ChipOptions options,
           std::vector<std::unique_ptr<LaneModel>> models)
    : time_(time),
      options_(std::move(options)),
      lock_s_(side.wire.lock_us * 1e-6),
      default_dwell_s_(side.wire.default_dwell_s),
      has_strobe_(side.binding.field(Part::strobe).has_value()),
      has_ordinal_(side.binding.field(Part::ordinal).has_value()),
      models_(std::move(models)),
      lanes_(models_.size()),
      registers_(side.map, side.binding, side.faults.wrong_identity, options_.reset_codes, *this) {
    assign_groups(side.binding);
    assign_tags();
    reset();
}

void Chip::assign_groups(const Binding& binding) {
    std::size_t groups = 0;
    for (Lane& lane : lanes_) lane.group = groups++;
    for (const auto& sharing : binding.shared_by) {
        for (const std::uint16_t lane : sharing) {
            if (lane < lanes_.size()) lanes_[lane].group = groups;
        }
        ++groups;
    }
    busy_until_.assign(groups, TimePoint{});
}

void Chip::assign_tags() {
    tags_.resize(lanes_.size());
    std::iota(tags_.begin(), tags_.end(), std::uint16_t{0});
    for (const auto& [one, other] : options_.chip.failures.swapped) {
        std::swap(tags_.at(one), tags_.at(other));
    }
}

void Chip::reset() {
    registers_.reset();
    std::fill(busy_until_.begin(), busy_until_.end(), TimePoint{});
    for (std::size_t lane = 0; lane < lanes_.size(); ++lane) {
        const std::size_t group = lanes_[lane].group;
        lanes_[lane] = Lane{};
        lanes_[lane].group = group;
        fall_back(static_cast<std::uint16_t>(lane));
    }
}

TimePoint Chip::after(double seconds) const {
    const std::chrono::duration<double> real(seconds * options_.time_scale);
    return time_.now() + std::chrono::duration_cast<std::chrono::nanoseconds>(real);
}

TimePoint Chip::next_change() const {
    TimePoint next = TimePoint::max();
    const auto consider = [&](TimePoint when) {
        if (when > time_.now()) next = std::min(next, when);
    };
    for (const TimePoint until : busy_until_) consider(until);
    for (const Lane& lane : lanes_) consider(lane.locked_from);
    return next;
}

// A result appears when its dwell is over, not before.
void Chip::finish_due() {
    for (std::size_t number = 0; number < lanes_.size(); ++number) {
        Lane& lane = lanes_[number];
        if (!lane.measuring || busy_until_[lane.group] > time_.now()) continue;
        draw(static_cast<std::uint16_t>(number));
        if (lane.shows == Work::latch) lane.edges = lane.pending_edges;
        if (lane.shows == Work::count) lane.counted = lane.pending_counted;
        lane.measuring = false;
        busy_until_[lane.group] = {};
    }
}

bool Chip::has_lock(const Lane& lane) const {
    return lane.locks && lane.locked_from <= time_.now();
}

bool Chip::loops_run(std::uint16_t lane) const {
    return registers_.stored(lane, Part::hold_loops).value_or(0) == 0 &&
           !FailureSwitches::holds(options_.chip.failures.loops_off, tags_[lane]);
}

// Where time does not pass, the pauses asked for count as passed, and so does the wait for lock.
double Chip::since_strobe_s(const Lane& lane) const {
    if (options_.time_scale <= 0) return std::max(lane.paused_s, lock_s_);
    const std::chrono::duration<double> real = time_.now() - lane.strobed_at;
    return real.count() / options_.time_scale;
}

int Chip::centre(std::uint16_t lane, Part part) const {
    return static_cast<int>((std::uint64_t{registers_.top(lane, part)} + 1) / 2);
}

std::uint32_t Chip::status(std::uint16_t number, Part part) {
    finish_due();
    switch (part) {
        case Part::temperature:
        case Part::supply:
        case Part::clock_present:
        case Part::clock_ok:
            return board_status(part);
        case Part::lock:
        case Part::loops:
        case Part::pattern_sync:
        case Part::inverted:
        case Part::losses:
        case Part::lane_tag:
        case Part::origin_offset:
        case Part::origin_phase:
            return receiver_status(number, part);
        default:
            return monitor_status(number, part);
    }
}

std::uint32_t Chip::monitor_status(std::uint16_t number, Part part) const {
    const Lane& lane = lanes_[number];
    const auto shown = [](std::uint64_t value) {
        return static_cast<std::uint32_t>(std::min<std::uint64_t>(value, 0xFFFFFFFFu));
    };
    switch (part) {
        case Part::busy:
            return busy_until_[lane.group] > time_.now() ? 1 : 0;
        case Part::closed:
            return lane.edges.closed ? 1 : 0;
        case Part::up:
            return static_cast<std::uint32_t>(lane.edges.up);
        case Part::down:
            return static_cast<std::uint32_t>(lane.edges.down);
        case Part::left:
            return static_cast<std::uint32_t>(lane.edges.left);
        case Part::right:
            return static_cast<std::uint32_t>(lane.edges.right);
        case Part::errors:
            return shown(lane.counted.errors);
        case Part::saturated:
            return lane.counted.errors >= registers_.top(number, Part::errors) ? 1 : 0;
        case Part::bits:
            return lane.counted.bits_log2;
        default:
            return 0;
    }
}

std::uint32_t Chip::receiver_status(std::uint16_t number, Part part) const {
    const Lane& lane = lanes_[number];
    const FailureSwitches& failures = options_.chip.failures;
    const auto origin = [&](int steps) {
        const int place = centre(number, part) + steps;
        return static_cast<std::uint32_t>(std::max(0, place));
    };
    switch (part) {
        case Part::lock:
            return has_lock(lane) ? 1 : 0;
        case Part::loops:
            return loops_run(number) ? 1 : 0;
        case Part::pattern_sync: {
            const bool lost = FailureSwitches::holds(failures.out_of_sync, tags_[number]);
            return has_lock(lane) && !lost ? 1 : 0;
        }
        case Part::inverted:
            return FailureSwitches::holds(failures.inverted, tags_[number]) ? 1 : 0;
        case Part::losses:
            return lane.losses;
        case Part::lane_tag:
            return tags_[number];
        case Part::origin_offset:
            return origin(models_[number]->origin().offset);
        case Part::origin_phase:
            return origin(models_[number]->origin().phase);
        default:
            return 0;
    }
}

std::uint32_t Chip::board_status(Part part) const {
    const Telemetry& telemetry = options_.chip.telemetry;
    const auto whole = [](double value) {
        return static_cast<std::uint32_t>(std::max(0.0, std::round(value)));
    };
    switch (part) {
        case Part::temperature:
            return whole(4 * (options_.temperature_c + telemetry.temperature_error_c -
                              lowest_temperature_c));
        case Part::supply:
            return whole(telemetry.supply_mv);
        case Part::clock_present:
            return options_.chip.failures.clock == ReferenceClock::absent ? 0 : 1;
        default:
            return options_.chip.failures.clock == ReferenceClock::good ? 1 : 0;
    }
}

void Chip::started(std::uint16_t lane, Part part) {
    if (part == Part::strobe) take_codes(lane);
    if (part == Part::trigger) start_measuring(lane, Work::latch);
    if (part == Part::count) start_measuring(lane, Work::count);
}

void Chip::written(std::uint16_t lane, Part part) {
    if (part == Part::ordinal) {
        draw(lane);
        const std::uint32_t ordinal = registers_.stored(lane, Part::ordinal).value_or(0);
        // The upper half of the numbers is for checks and references.
        models_[lane]->number(ordinal, ordinal > registers_.top(lane, Part::ordinal) / 2);
    } else if (!has_strobe_) {
        take_codes(lane);
    }
}

std::vector<int> Chip::stored_codes(std::uint16_t lane) const {
    std::vector<int> codes;
    for (const Part part : {Part::r1, Part::c1, Part::r2, Part::c2}) {
        codes.push_back(static_cast<int>(registers_.stored(lane, part).value_or(0)));
    }
    return codes;
}

void Chip::take_codes(std::uint16_t lane) {
    draw(lane);  // what is under way looked at the codes before
    std::vector<int> codes = stored_codes(lane);
    const bool locks = models_[lane]->put(codes, !loops_run(lane));
    hold(lane, std::move(codes), locks);
}

void Chip::fall_back(std::uint16_t lane) {
    std::vector<int> codes = stored_codes(lane);
    const bool locks = models_[lane]->fall_back(codes);
    hold(lane, std::move(codes), locks);
}

// New codes move the sampling phase, so that lock is lost for a while even where it comes back.
void Chip::hold(std::uint16_t number, std::vector<int> codes, bool locks) {
    Lane& lane = lanes_[number];
    lane.new_reading = true;
    if (lane.locks && !locks) ++lane.losses;
    lane.locks = locks;
    lane.strobed_at = time_.now();
    lane.paused_s = 0;
    if (codes == lane.codes) return;
    lane.codes = std::move(codes);
    lane.locked_from = after(lock_s_);
}

// A trigger that finds the monitor at work, for this lane or one that shares it, does nothing.
void Chip::start_measuring(std::uint16_t number, Work work) {
    finish_due();
    Lane& lane = lanes_[number];
    TimePoint& busy_until = busy_until_[lane.group];
    if (busy_until > time_.now()) return;
    // Without numbers, what is latched is a reading, and the counted looks between two strobes are.
    if (!has_ordinal_ && (work == Work::latch || lane.new_reading)) {
        models_[number]->number(++lane.started, false);
    }
    lane.new_reading = false;
    prepare(number, work);
    mark_parallel(number);
    busy_until = after(static_cast<double>(lane.bits) / options_.bit_rate_hz);
    finish_due();
}

void Chip::prepare(std::uint16_t number, Work work) {
    Lane& lane = lanes_[number];
    lane.work = lane.shows = work;
    lane.measuring = true;
    lane.look = {since_strobe_s(lane), false, has_lock(lane)};
    const auto log2 = registers_.stored(number, Part::dwell_log2);
    lane.bits = log2 ? std::uint64_t{1} << std::min(*log2, most_dwell_log2)
                     : static_cast<std::uint64_t>(default_dwell_s_ * options_.bit_rate_hz);
    if (work == Work::latch) {
        const auto exponent = registers_.stored(number, Part::ratio_exponent);
        lane.ratio = exponent
                         ? std::pow(10.0, -std::clamp(static_cast<int>(std::min(*exponent, 99u)), 1,
                                                      smallest_ratio_exponent))
                         : 0.0;
        return;
    }
    lane.bits_log2 = 0;
    while (lane.bits_log2 < most_counted_log2 && (lane.bits >> (lane.bits_log2 + 1)) != 0) {
        ++lane.bits_log2;
    }
    lane.bits = std::uint64_t{1} << lane.bits_log2;
    lane.point.offset = static_cast<int>(registers_.stored(number, Part::offset).value_or(0)) -
                        centre(number, Part::offset);
    lane.point.phase = static_cast<int>(registers_.stored(number, Part::phase).value_or(0)) -
                       centre(number, Part::phase);
}

// Those whose monitors are at work at the same time disturb each other, where they do at all.
void Chip::mark_parallel(std::uint16_t number) {
    for (std::size_t other = 0; other < lanes_.size(); ++other) {
        if (other == number || !lanes_[other].measuring) continue;
        if (busy_until_[lanes_[other].group] <= time_.now()) continue;
        lanes_[other].look.in_parallel = lanes_[number].look.in_parallel = true;
    }
}

// Drawn at the end of the dwell, when everything that disturbs it is known, or when the lane goes
// on to something else.
void Chip::draw(std::uint16_t number) {
    Lane& lane = lanes_[number];
    const Work work = std::exchange(lane.work, Work::none);
    if (work == Work::latch) {
        lane.pending_edges = models_[number]->latch(lane.look, lane.ratio, lane.bits);
    } else if (work == Work::count) {
        lane.pending_counted = models_[number]->count(lane.look, lane.point, lane.bits_log2);
    }
}

bool Chip::foreign_writes(std::uint64_t batch) {
    bool any = false;
    for (const ForeignWrite& write : options_.chip.failures.foreign_writes) {
        const auto& at = write.at_batches;
        if (std::find(at.begin(), at.end(), batch) == at.end()) continue;
        registers_.overwrite(write.lane, static_cast<Part>(write.dimension), write.code);
        take_codes(write.lane);
        any = true;
    }
    return any;
}

}  // namespace lanewright::sim
