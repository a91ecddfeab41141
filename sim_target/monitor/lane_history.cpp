#include "sim_target/monitor/lane_history.hpp"

#include <algorithm>
#include <cmath>

namespace lanewright::sim {

namespace {

constexpr std::size_t most_records = 4096;
constexpr std::size_t most_places = 65536;
constexpr double long_ago_s = 1e12;

std::vector<std::uint64_t> key_of(std::uint64_t lane, std::uint64_t ordinal,
                                  const FourCodes& codes) {
    std::vector<std::uint64_t> key{lane, ordinal};
    for (const int code : codes) key.push_back(static_cast<std::uint64_t>(code));
    return key;
}

// A step of an Ornstein-Uhlenbeck process with standard deviation 1: exact for any step, however
// long (Uhlenbeck and Ornstein, Phys. Rev. 36, 1930).
double stepped(double before, double seconds, double time_constant_s, double normal) {
    const double kept = std::exp(-seconds / time_constant_s);
    return kept * before + std::sqrt(1.0 - kept * kept) * normal;
}

}  // namespace

LaneHistory::LaneHistory(const MonitorOptions& monitor, const ChipOfTarget& chip,
                         std::uint64_t seed, int lane)
    : drift_time_s_(monitor.drift_time_s),
      lock_(chip.lock),
      effects_(chip.write_effects),
      return_times_(chip.failures.return_error_times),
      never_locks_(FailureSwitches::holds(chip.failures.no_lock, lane) ||
                   chip.failures.clock == ReferenceClock::absent),
      seed_(seed),
      lane_(static_cast<std::uint64_t>(lane)) {}

bool LaneHistory::lock_after(const Standing* before, const FourCodes& codes,
                             double spread_ui) const {
    if (never_locks_) return false;
    if (before != nullptr && before->codes == codes) return before->locked;
    const bool had = before != nullptr && before->locked;
    return spread_ui <= (had ? lock_.lost_above_ui : lock_.regained_below_ui);
}

// As for every record: it follows the run's own readings, whatever was looked at beside them.
bool LaneHistory::locks(const FourCodes& codes, double spread_ui) const {
    return lock_after(own_.current(), codes, spread_ui);
}

double LaneHistory::drawn(Purpose purpose, std::uint64_t ordinal, std::uint64_t which) const {
    return KeyedRandom(seed_, purpose, {lane_, ordinal, which}).normal();
}

// Where lock was lost in between, the loop lands anew; a number that was left out, after codes
// without lock, was a reading that never began. Else it stays where it landed last.
double LaneHistory::landing(const Before& from, const Standing& now, bool loops_held) const {
    const std::vector<std::uint64_t> key = key_of(lane_, now.ordinal, now.codes);
    KeyedRandom random(seed_, Purpose::lock_landing, key);
    if (now.changed && !loops_held && effects_.unheld_landing_ui > 0) {
        return effects_.unheld_landing_ui * random.normal();
    }
    if (from.standing == nullptr) return 0;
    const bool lost = !from.standing->locked || from.left_out;
    return lost ? lock_.landing_sigma_ui * random.normal() : from.standing->landing_ui;
}

// `named` has the number and the codes.
Standing LaneHistory::made(const Before& from, const Standing& named, double spread_ui,
                           bool loops_held) const {
    const Standing* before = from.standing;
    const Standing start = before != nullptr ? *before : Standing{};
    Standing now = named;
    now.changed = before == nullptr || before->codes != now.codes;
    now.entered = now.changed ? now.ordinal : before->entered;
    now.locked = locks(now.codes, spread_ui);
    const double passed = before != nullptr ? before->charged_s : long_ago_s;
    now.time_s = before != nullptr ? before->time_s + passed : 0;
    const double drift_s = drift_time_s_, wander_s = lock_.wander_time_s;
    now.offset_drift =
        stepped(start.offset_drift, passed, drift_s, drawn(Purpose::monitor_drift, now.ordinal, 0));
    now.phase_drift =
        stepped(start.phase_drift, passed, drift_s, drawn(Purpose::monitor_drift, now.ordinal, 1));
    now.wander =
        stepped(start.wander, passed, wander_s, drawn(Purpose::phase_wander, now.ordinal, 0));
    now.landing_ui = landing(from, now, loops_held);
    const std::vector<std::uint64_t> key = key_of(lane_, now.entered, now.codes);
    KeyedRandom random(seed_, Purpose::return_error, key);
    now.return_gain = std::max(0.5, 1.0 + return_times_ * effects_.return_gain * random.normal());
    now.return_offset_mv = return_times_ * effects_.return_offset_mv * random.normal();
    return now;
}

// Backwards from where it is, or the next one forward.
bool LaneHistory::Chain::find(std::uint64_t ordinal, const FourCodes& codes) {
    if (records.empty()) return false;
    const auto fits = [&](std::size_t index) {
        return records[index].ordinal == ordinal && records[index].codes == codes;
    };
    for (std::size_t index = at + 1; index-- > 0;) {
        if (!fits(index)) continue;
        at = index;
        return true;
    }
    if (at + 1 >= records.size() || !fits(at + 1)) return false;
    ++at;
    return true;
}

// Also the record of the number itself, with its other codes.
void LaneHistory::Chain::drop_what_follows(std::uint64_t ordinal) {
    if (records.empty()) return;
    records.resize(at + 1);
    if (records.back().ordinal == ordinal) records.pop_back();
    at = records.empty() ? 0 : records.size() - 1;
}

const Standing& LaneHistory::begin(std::uint64_t ordinal, const FourCodes& codes, double spread_ui,
                                   bool loops_held, bool beside) {
    const Standing* last = current();
    const bool goes_on = last != nullptr && last->ordinal == ordinal && last->codes == codes;
    Chain& chain = beside ? beside_ : own_;
    Chain& used = *current_;
    current_ = &chain;
    if (goes_on) return *last;
    restart();
    if (chain.find(ordinal, codes)) return *chain.current();

    chain.drop_what_follows(ordinal);
    Before from{chain.current(), false};
    if (from.standing != nullptr) {
        from.left_out = chain.missed_lock && from.standing->ordinal + 1 != ordinal;
    }
    if (beside && &used == &own_ && own_.current() != nullptr) from = {own_.current(), false};
    Standing named;
    named.ordinal = ordinal;
    named.codes = codes;
    chain.records.push_back(made(from, named, spread_ui, loops_held));
    if (chain.records.size() > most_records) chain.records.pop_front();
    chain.at = chain.records.size() - 1;
    chain.missed_lock = false;
    return *chain.current();
}

void LaneHistory::restart() {
    passed_s_ = 0;
    looks_ = 0;
    looks_at_.clear();
}

LaneHistory::LookNumber LaneHistory::next_look(int offset, int phase, unsigned bits_log2) {
    const std::uint64_t index = looks_++;
    if (looks_at_.size() >= most_places) return {index, index};
    return {looks_at_[{offset, phase, bits_log2}]++, index};
}

void LaneHistory::charge(double seconds) {
    passed_s_ += seconds;
    if (current() == nullptr) return;
    Standing& now = current_->records[current_->at];
    now.charged_s = std::max(now.charged_s, passed_s_);
}

}  // namespace lanewright::sim
