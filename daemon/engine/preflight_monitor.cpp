#include "daemon/engine/preflight_monitor.hpp"

#include <algorithm>
#include <array>
#include <cmath>

#include "adapt/search/text.hpp"
#include "daemon/engine/edge_statistics.hpp"

namespace lanewright {

namespace {

// A burst or a slip can spoil one reading in a hundred: what looks wrong is looked at once more.
constexpr int most_rounds = 2;
constexpr double sure = 5;  // standard deviations of a count
// Patterns are not balanced to the last bit, and a monitor's far end is not infinitely far.
constexpr double half_tolerance = 0.03;
constexpr double closed_ratio = 1e-2;  // a centre as bad as that has no inside to compare with
// Looks to either side of the centre, evenly over the monitor's reach. A bit of its position that
// is stuck folds parts of the way onto others; that shows where the distance is no power of two.
constexpr int looks_a_side = 24;
constexpr std::uint64_t look_bits = 1u << 16;  // half errors to within 0.2 %, in microseconds
constexpr double ratio_step = 1000, highest_ratio = 1e-3;

double ratio_of(const Count& count) {
    return count.look.bits == 0
               ? 0
               : static_cast<double>(count.errors) / static_cast<double>(count.look.bits);
}

double variance_of(const Count& count) {
    const auto bits = static_cast<double>(std::max<std::uint64_t>(count.look.bits, 1));
    const double ratio = (static_cast<double>(count.errors) + 1) / (bits + 2);
    return ratio * (1 - std::min(ratio, 1.0)) / bits;
}

std::string place_of(const Look& look) {
    return general(look.offset_mv, 4) + " mV, " + general(look.phase_ui, 3) + " UI";
}

class MonitorProbe : public Probe {
  public:
    // At codes that are known to open the eye, where any are; else at those found.
    explicit MonitorProbe(const ProbeInput& input)
        : problem_(*input.problem), setup_(input.setup), codes_(input.problem->present) {
        const auto open = input.before.find(item::open_codes);
        if (open != input.before.end() && open->second.codes) codes_ = *open->second.codes;
    }
    std::string_view phase() const override { return "preflight"; }

  protected:
    PreflightItem blank() const {
        PreflightItem out;
        out.lane = problem_.lane;
        out.name = item::monitor;
        out.codes = codes_;
        out.settings = settings_of(problem_.reading);
        return out;
    }
    LaneProblem problem_;
    PreflightSetup setup_;
    Codes codes_;
};

class CountedSanity final : public MonitorProbe {
  public:
    using MonitorProbe::MonitorProbe;

    std::vector<Request> propose(Condition now) override {
        if (rounds_ >= most_rounds || (rounds_ > 0 && wrong_.empty())) return {};
        Request request;
        request.codes = codes_;
        request.condition = now;
        request.what = LooksWanted{looks()};
        request.why = "preflight: is the monitor sane";
        return {request};
    }
    void observe(std::span<const Reading> readings) override {
        ++rounds_;
        counts_ = readings.empty() ? std::vector<Count>() : readings.front().counts;
        wrong_ = what_is_wrong();
    }
    PreflightItem item() const override {
        PreflightItem out = blank();
        out.expected = "half errors far outside, the bits asked for, errors that rise outwards";
        if (counts_.empty()) {
            out.found = "without lock the monitor counts nothing";
            return out;
        }
        out.values["far_error_ratio"] = ratio_of(counts_.front());
        out.values["least_error_ratio"] = ratio_of(*least(counts_));
        out.result = wrong_.empty() ? ItemResult::passed : ItemResult::failed;
        out.found = wrong_.empty() ? std::to_string(counts_.size()) + " looks as expected" : wrong_;
        if (!wrong_.empty()) {
            out.advice =
                "Check the board file's look sequence (point, dwell, wait, fields read), "
                "that the pattern checker is in sync, and the counter's width";
        }
        return out;
    }

  private:
    // From the far end below through the centre to the far end above.
    std::vector<Look> looks() const {
        std::vector<Look> out;
        std::uint64_t bits = look_bits;
        while (setup_.most_errors > 0 && bits > 1024 && bits > setup_.most_errors) bits /= 2;
        bits = std::max(bits, setup_.least_bits);
        for (int i = -looks_a_side; i <= looks_a_side; ++i) {
            out.push_back({0, setup_.height_reach_mv * i / looks_a_side, bits});
        }
        return out;
    }
    static std::vector<Count>::const_iterator least(const std::vector<Count>& counts) {
        return std::min_element(counts.begin(), counts.end(), [](const Count& a, const Count& b) {
            return ratio_of(a) < ratio_of(b);
        });
    }

    std::string what_is_wrong() const {
        if (counts_.empty()) return {};
        const std::vector<Look> asked = looks();
        if (counts_.size() != asked.size()) {
            return std::to_string(counts_.size()) + " counts came of " +
                   std::to_string(asked.size()) + " looks";
        }
        for (std::size_t i = 0; i < asked.size(); ++i) {
            if (counts_[i].look.bits == asked[i].bits) continue;
            return "bits: " + std::to_string(counts_[i].look.bits) + " were counted where " +
                   std::to_string(asked[i].bits) + " were asked for";
        }
        for (const Count* far : {&counts_.front(), &counts_.back()}) {
            if (far->saturated) continue;  // a lower limit says nothing here
            const double off = std::abs(ratio_of(*far) - 0.5);
            if (off <= half_tolerance + sure * std::sqrt(variance_of(*far))) continue;
            return "far outside (" + place_of(far->look) + ") the error ratio is " +
                   general(ratio_of(*far), 3) + ", not one half";
        }
        return not_rising();
    }
    // Outwards from the look with the fewest errors, which need not be the one at no offset.
    std::string not_rising() const {
        const auto centre = least(counts_);
        if (ratio_of(*centre) > closed_ratio) return {};
        for (auto at = centre; at + 1 != counts_.end(); ++at) {
            if (std::string wrong = falls(*at, *(at + 1)); !wrong.empty()) return wrong;
        }
        for (auto at = centre; at != counts_.begin(); --at) {
            if (std::string wrong = falls(*at, *(at - 1)); !wrong.empty()) return wrong;
        }
        return {};
    }
    static std::string falls(const Count& inner, const Count& outer) {
        if (outer.saturated) return {};
        const double fall = ratio_of(inner) - ratio_of(outer);
        if (fall <= sure * std::sqrt(variance_of(inner) + variance_of(outer))) return {};
        return "not monotone: farther out (" + place_of(outer.look) + ") there are fewer errors, " +
               general(ratio_of(outer), 3) + " after " + general(ratio_of(inner), 3);
    }

    int rounds_ = 0;
    std::vector<Count> counts_;
    std::string wrong_;
};

class LatchedSanity final : public MonitorProbe {
  public:
    explicit LatchedSanity(const ProbeInput& input) : MonitorProbe(input) {
        low_ = problem_.reading.error_ratio;
        high_ = std::min(highest_ratio, low_ * ratio_step);
    }

    std::vector<Request> propose(Condition now) override {
        const bool enough = rounds_ >= most_rounds || (rounds_ > 0 && wrong_.empty());
        if (enough || high_ <= low_) return {};
        std::vector<Request> out(2);
        for (Request& request : out) {
            request.codes = codes_;
            request.condition = now;
            request.what = problem_.reading;
            request.why = "preflight: is the monitor sane";
        }
        std::get<MarginWanted>(out[1].what).error_ratio = high_;
        return out;
    }
    void observe(std::span<const Reading> readings) override {
        ++rounds_;
        if (readings.size() < 2) return;
        strict_ = readings[0];
        loose_ = readings[1];
        wrong_ = what_is_wrong();
    }
    PreflightItem item() const override {
        PreflightItem out = blank();
        out.expected = "an eye that is not smaller at a higher error ratio";
        if (rounds_ == 0) {
            out.found = "the search's error ratio is the highest of this monitor";
            return out;
        }
        const bool open = strict_.status == Status::open || strict_.status == Status::saturated;
        if (wrong_.empty() && !open) {
            out.found = "the eye is closed, no edges to compare";
            return out;
        }
        out.result = wrong_.empty() ? ItemResult::passed : ItemResult::failed;
        out.found = wrong_.empty()
                        ? "as expected at " + general(low_, 3) + " and " + general(high_, 3) +
                              "; a latch does not show counts or bits"
                        : wrong_;
        if (!wrong_.empty()) {
            out.advice =
                "Check the board file's monitor sequence (error ratio, dwell, wait, "
                "fields read) and the step sizes";
        }
        return out;
    }

  private:
    std::string what_is_wrong() const {
        const std::string both = " at " + general(high_, 3) + " and at " + general(low_, 3);
        const bool open = strict_.status == Status::open || strict_.status == Status::saturated;
        if (open && loose_.status == Status::closed) {
            return "not monotone: the eye is closed" + both.substr(0, both.find(" and")) +
                   " and open at " + general(low_, 3);
        }
        for (const auto& [member, name, unit, step, sigma] : edges()) {
            const std::optional<Measured>&strict = strict_.*member, &loose = loose_.*member;
            if (!strict || !loose || strict->bound == Bound::at_most) continue;
            const double off = std::sqrt(2 * (sigma * sigma + step * step / 12));
            if (strict->value - loose->value <= sure * off) continue;
            return std::string("not monotone: the ") + name + " edge is at " +
                   general(loose->value, 3) + unit + " and at " + general(strict->value, 3) + unit +
                   both;
        }
        return {};
    }
    struct Edge {
        std::optional<Measured> Reading::* member;
        const char* name;
        const char* unit;
        double step, sigma;
    };
    std::array<Edge, 4> edges() const {
        const MonitorNoise& n = problem_.noise;
        return {{{&Reading::up_mv, "up", " mV", n.height_step_mv, n.height_sigma_mv},
                 {&Reading::down_mv, "down", " mV", n.height_step_mv, n.height_sigma_mv},
                 {&Reading::left_ui, "left", " UI", n.width_step_ui, n.width_sigma_ui},
                 {&Reading::right_ui, "right", " UI", n.width_step_ui, n.width_sigma_ui}}};
    }

    double low_ = 0, high_ = 0;
    int rounds_ = 0;
    Reading strict_, loose_;
    std::string wrong_;
};

}  // namespace

std::unique_ptr<Probe> make_monitor_probe(const ProbeInput& input) {
    if (input.setup.counted) return std::make_unique<CountedSanity>(input);
    return std::make_unique<LatchedSanity>(input);
}

}  // namespace lanewright
