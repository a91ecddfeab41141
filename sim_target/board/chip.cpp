#include "sim_target/board/chip.hpp"

#include <algorithm>
#include <cmath>

namespace lanewright::sim {

namespace {

constexpr std::uint32_t most_dwell_log2 = 62;
constexpr int smallest_ratio_exponent = 18;

}  // namespace

Chip::Chip(TimeSource& time, const BoardSide& side, ChipOptions options,
           std::vector<std::unique_ptr<LaneModel>> models)
    : time_(time),
      options_(std::move(options)),
      lock_s_(side.wire.lock_us * 1e-6),
      default_dwell_s_(side.wire.default_dwell_s),
      has_strobe_(side.binding.field(Part::strobe).has_value()),
      models_(std::move(models)),
      lanes_(models_.size()),
      registers_(side.map, side.binding, side.faults.wrong_identity, options_.reset_codes, *this) {
    assign_groups(side.binding);
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

void Chip::reset() {
    registers_.reset();
    std::fill(busy_until_.begin(), busy_until_.end(), TimePoint{});
    for (std::uint16_t lane = 0; lane < lanes_.size(); ++lane) {
        const std::size_t group = lanes_[lane].group;
        lanes_[lane] = Lane{};
        lanes_[lane].group = group;
        take_codes(lane);
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

// A reading's result appears when its dwell is over, not before.
void Chip::finish_due() {
    for (Lane& lane : lanes_) {
        if (!lane.measuring || busy_until_[lane.group] > time_.now()) continue;
        lane.edges = lane.pending;
        lane.measuring = false;
        busy_until_[lane.group] = {};
    }
}

bool Chip::has_lock(const Lane& lane) const {
    return lane.locks && lane.locked_from <= time_.now();
}

std::uint32_t Chip::status(std::uint16_t number, Part part) {
    finish_due();
    const Lane& lane = lanes_[number];
    switch (part) {
        case Part::busy:
            return busy_until_[lane.group] > time_.now() ? 1 : 0;
        case Part::closed:
            return lane.edges.closed ? 1 : 0;
        case Part::lock:
            return has_lock(lane) ? 1 : 0;
        case Part::up:
            return static_cast<std::uint32_t>(lane.edges.up);
        case Part::down:
            return static_cast<std::uint32_t>(lane.edges.down);
        case Part::left:
            return static_cast<std::uint32_t>(lane.edges.left);
        case Part::right:
            return static_cast<std::uint32_t>(lane.edges.right);
        default:
            return 0;
    }
}

void Chip::started(std::uint16_t lane, Part part) {
    if (part == Part::strobe) take_codes(lane);
    if (part == Part::trigger) start_reading(lane);
}

void Chip::code_written(std::uint16_t lane) {
    if (!has_strobe_) take_codes(lane);
}

// New codes move the sampling phase, so that lock is lost for a while even where it comes back.
void Chip::take_codes(std::uint16_t number) {
    Lane& lane = lanes_[number];
    std::vector<int> written;
    for (const Part part : {Part::r1, Part::c1, Part::r2, Part::c2}) {
        written.push_back(static_cast<int>(registers_.stored(number, part).value_or(0)));
    }
    if (written == lane.codes) return;
    lane.codes = std::move(written);
    lane.locks = models_[number]->locks(lane.codes);
    lane.locked_from = after(lock_s_);
}

std::uint64_t Chip::dwell_bits(std::uint16_t lane) const {
    const auto exponent = registers_.stored(lane, Part::dwell_log2);
    if (exponent) return std::uint64_t{1} << std::min(*exponent, most_dwell_log2);
    return static_cast<std::uint64_t>(default_dwell_s_ * options_.bit_rate_hz);
}

// The codes are looked at when the reading starts. A trigger that finds the monitor at work, for
// this lane or one that shares it, does nothing.
void Chip::start_reading(std::uint16_t number) {
    finish_due();
    Lane& lane = lanes_[number];
    TimePoint& busy_until = busy_until_[lane.group];
    if (busy_until > time_.now()) return;
    ++lane.started;
    const std::uint64_t ordinal = registers_.stored(number, Part::ordinal).value_or(lane.started);
    const auto exponent = registers_.stored(number, Part::ratio_exponent);
    const double ratio =
        exponent ? std::pow(10.0, -std::clamp(static_cast<int>(std::min(*exponent, 99u)), 1,
                                              smallest_ratio_exponent))
                 : 0.0;
    const std::uint64_t bits = dwell_bits(number);
    lane.pending = LatchedEdges{};
    lane.pending.closed = true;
    if (has_lock(lane)) lane.pending = models_[number]->latch(lane.codes, ratio, bits, ordinal);
    lane.measuring = true;
    busy_until = after(static_cast<double>(bits) / options_.bit_rate_hz);
    finish_due();
}

}  // namespace lanewright::sim
