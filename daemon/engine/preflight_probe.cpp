// The items that readings of one open code tell; the monitor's own sanity is in preflight_monitor.

#include "daemon/engine/preflight_probe.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <utility>

#include "adapt/search/closed_scan.hpp"
#include "adapt/search/score.hpp"
#include "adapt/search/text.hpp"
#include "adapt/stats/normal.hpp"
#include "daemon/engine/edge_statistics.hpp"
#include "daemon/engine/preflight_monitor.hpp"

namespace lanewright {

namespace {

constexpr std::size_t most_codes_tried = 16;
constexpr std::size_t repeat_count = 20, return_count = 5, pair_count = 10;
constexpr double significance = 0.025;  // of a limit that is exceeded: one side of 95 %
// One a decade, from nothing on top of what the board file declares.
constexpr std::array<double, 5> waits_s{0, 1e-4, 1e-3, 1e-2, 1e-1};
// The return error is that of codes that stand still: long after they came back.
constexpr double return_wait_s = waits_s.back();

// Codes to leave these for: every dimension a quarter of its range away, towards the farther end,
// as far as that is allowed. That moves everything, and seldom costs the lock.
Codes away_from(const CodeSpace& space, const Codes& codes) {
    Codes away = codes;
    for (std::size_t i = 0; i < away.value.size() && i < space.dimensions().size(); ++i) {
        const Dimension& dimension = space.dimensions()[i];
        const std::int32_t below = codes.value[i] - dimension.lowest;
        const std::int32_t above = dimension.highest - codes.value[i];
        const std::int32_t quarter = (above + below + 3) / 4;
        Codes next = away;
        next.value[i] += above > below ? std::min(quarter, above) : -std::min(quarter, below);
        if (space.allows(next)) away = next;
    }
    return away;
}

std::string plus_minus(double mv, double ui) {
    return fixed(mv, 2) + " mV and " + fixed(ui, 4) + " UI";
}

std::string limits_text(const std::optional<double>& mv, const std::optional<double>& ui) {
    if (!mv && !ui) return "the board file states no limit";
    std::string out = "at most ";
    if (mv) out += general(*mv, 3) + " mV";
    if (mv && ui) out += " and ";
    if (ui) out += general(*ui, 3) + " UI";
    return out;
}

// Whether more than the limit is seen, with 95 % certainty.
bool exceeds(double sum_of_squares, double degrees, const std::optional<double>& limit) {
    return limit && larger_spread_chance(sum_of_squares, degrees, *limit) < significance;
}

// A probe that asks for margins at given codes, one after another.
class MarginProbe : public Probe {
  public:
    MarginProbe(std::string name, const ProbeInput& input)
        : name_(std::move(name)), problem_(*input.problem), input_(input) {
        const auto open = input.before.find(item::open_codes);
        if (open != input.before.end()) open_ = open->second.codes;
    }
    std::string_view phase() const override { return "preflight"; }

  protected:
    Request margin_at(const Codes& codes, Condition now, std::string why) const {
        Request request;
        request.codes = codes;
        request.condition = now;
        request.what = problem_.reading;
        request.why = "preflight: " + why;
        return request;
    }
    PreflightItem blank() const {
        PreflightItem out;
        out.lane = problem_.lane;
        out.name = name_;
        out.codes = open_;
        out.settings = settings_of(problem_.reading);
        return out;
    }
    PreflightItem without_open_codes() const {
        PreflightItem out = blank();
        out.found = "not measured: no codes with an open eye are known on this lane";
        return out;
    }
    const PreflightItem* before(const char* name) const {
        const auto found = input_.before.find(name);
        return found == input_.before.end() ? nullptr : &found->second;
    }
    // The step that a latching monitor rounds to; a counting one finds edges between its steps.
    double step(bool vertical) const {
        if (input_.setup.counted) return 0;
        return vertical ? problem_.noise.height_step_mv : problem_.noise.width_step_ui;
    }

    std::string name_;
    LaneProblem problem_;
    ProbeInput input_;
    std::optional<Codes> open_;
};

// The present codes, and where these show nothing, codes spread over the space, until one opens
// the eye. What was found before is tried first: it may not stand on the chip any more.
class OpenCodes final : public MarginProbe {
  public:
    explicit OpenCodes(const ProbeInput& input) : MarginProbe(item::open_codes, input) {
        const CodeSpace& space = *problem_.space;
        if (open_) candidates_.push_back(*std::exchange(open_, std::nullopt));
        if (space.allows(problem_.present)) candidates_.push_back(problem_.present);
        for (Codes& codes : closed_scan(space, problem_.present, most_codes_tried - 1)) {
            candidates_.push_back(std::move(codes));
        }
    }

    std::vector<Request> propose(Condition now) override {
        if (open_ || tried_ >= candidates_.size()) return {};
        return {margin_at(candidates_[tried_], now, "codes with an open eye")};
    }
    void observe(std::span<const Reading> readings) override {
        if (!readings.empty() && readings.front().status == Status::open) {
            open_ = candidates_[tried_];
        }
        ++tried_;
    }
    PreflightItem item() const override {
        PreflightItem out = blank();
        out.expected = "an eye that is open at the error ratio of the search";
        out.result = open_ ? ItemResult::passed : ItemResult::not_shown;
        out.values["codes_tried"] = static_cast<double>(tried_);
        out.found = open_ ? text_of(*problem_.space, *open_)
                          : "none of " + std::to_string(tried_) + " codes shows one";
        if (!open_) {
            out.advice =
                "Check that the far end sends the pattern and that the channel is "
                "connected; the search may still find codes";
        }
        return out;
    }

  private:
    std::vector<Codes> candidates_;
    std::size_t tried_ = 0;
};

// The same codes again and again.
class Repeats final : public MarginProbe {
  public:
    Repeats(const char* name, std::size_t count, const ProbeInput& input)
        : MarginProbe(name, input), count_(count) {}

    std::vector<Request> propose(Condition now) override {
        if (!open_ || !readings_.empty()) return {};
        return std::vector<Request>(count_, margin_at(*open_, now, name_));
    }
    void observe(std::span<const Reading> readings) override {
        readings_.assign(readings.begin(), readings.end());
    }
    PreflightItem item() const override {
        if (!open_) return without_open_codes();
        PreflightItem out = blank();
        const Kept kept = without_strays(readings_, problem_.noise);
        const std::vector<EdgeStatistics> edges = edge_statistics(kept.readings);
        const bool judged = name_ == item::repeatability;
        const PreflightLimits& limits = input_.setup.limits;
        out.expected = judged ? limits_text(limits.repeatability_mv, limits.repeatability_ui)
                              : "an open eye in every reading";
        out.values = values_of(edges);
        out.values["left_out"] = static_cast<double>(kept.left_out);
        if (edges.empty()) return not_steady(std::move(out));
        const Sigma height = pooled_sigma(edges, true, step(true));
        const Sigma width = pooled_sigma(edges, false, step(false));
        out.values["height_sigma_mv"] = height.value;
        out.values["width_sigma_ui"] = width.value;
        out.found = "sigma of one edge " + plus_minus(height.value, width.value) + ", " +
                    std::to_string(kept.readings.size()) + " readings" +
                    without_spread(height.value > 0, width.value > 0);
        if (kept.left_out > 0) {
            out.found += ", " + std::to_string(kept.left_out) + " that stood apart left out";
        }
        out.result = ItemResult::passed;
        const bool too_much = exceeds(height.degrees * height.value * height.value, height.degrees,
                                      limits.repeatability_mv) ||
                              exceeds(width.degrees * width.value * width.value, width.degrees,
                                      limits.repeatability_ui);
        if (judged && too_much) {
            out.result = ItemResult::failed;
            out.advice =
                "Look for what disturbs the monitor (supply, on-chip loops, another "
                "program), lengthen the dwell, or state the limit in the board file that "
                "you accept";
        }
        return out;
    }

  private:
    // No spread at all is no proof of no noise: a monitor may repeat an old answer.
    static std::string without_spread(bool height, bool width) {
        if (height && width) return {};
        const std::string which =
            height ? "horizontal edges of " : (width ? "vertical edges of " : "");
        return ", " + which +
               "all readings the same: cannot tell, what the board file declares is kept";
    }
    PreflightItem not_steady(PreflightItem out) const {
        const auto open = std::count_if(readings_.begin(), readings_.end(),
                                        [](const auto& r) { return r.status == Status::open; });
        out.found = "the eye was open in only " + std::to_string(open) + " of " +
                    std::to_string(readings_.size()) + " readings of the same codes";
        out.result = ItemResult::failed;
        out.advice = "Check lock and reference clock: the lane comes and goes";
        return out;
    }

    std::size_t count_;
    std::vector<Reading> readings_;
};

// What returning probes compare with: the readings of the repeatability.
struct Base {
    std::vector<EdgeStatistics> edges;
    double height_sigma = 0, width_sigma = 0;

    const EdgeStatistics* find(const std::string& name) const {
        const auto found = std::find_if(edges.begin(), edges.end(),
                                        [&](const auto& edge) { return edge.name == name; });
        return found == edges.end() ? nullptr : &*found;
    }
};

std::optional<Base> base_from(const PreflightItem* repeatability) {
    if (repeatability == nullptr) return std::nullopt;
    Base base;
    base.edges = edges_from(repeatability->values);
    const auto value = [&](const char* name) {
        const auto found = repeatability->values.find(name);
        return found == repeatability->values.end() ? 0.0 : found->second;
    };
    base.height_sigma = value("height_sigma_mv");
    base.width_sigma = value("width_sigma_ui");
    if (base.edges.empty()) return std::nullopt;
    return base;
}

// Away to far codes and back again, so many times; each return may wait before it reads.
class Returning : public MarginProbe {
  public:
    Returning(const char* name, std::vector<double> waits, const ProbeInput& input)
        : MarginProbe(name, input), waits_(std::move(waits)) {
        base_ = base_from(before(item::repeatability));
        if (open_) away_ = away_from(*problem_.space, *open_);
    }

    std::vector<Request> propose(Condition now) override {
        if (!ready() || !back_.empty()) return {};
        std::vector<Request> out;
        for (const double wait : waits_) {
            Request leaving = margin_at(away_, now, "leaving the open codes");
            // Nothing is asked of this reading; its dwell is as short as the monitor allows.
            auto& wanted = std::get<MarginWanted>(leaving.what);
            const double few = std::max(10.0 / wanted.error_ratio, 1.0);
            wanted.dwell_bits = std::min(wanted.dwell_bits, static_cast<std::uint64_t>(few));
            out.push_back(std::move(leaving));
            out.push_back(margin_at(*open_, now, name_));
            out.back().wait_s = wait;
        }
        return out;
    }
    void observe(std::span<const Reading> readings) override {
        for (std::size_t i = 1; i < readings.size(); i += 2) back_.push_back(readings[i]);
    }

  protected:
    bool ready() const { return open_ && base_ && away_ != *open_; }
    PreflightItem not_ready() const {
        PreflightItem out = without_open_codes();
        if (open_ && base_) out.found = "not measured: there are no other codes to leave for";
        if (open_ && !base_) out.found = "not measured: the repeatability is not known";
        return out;
    }
    // Variance of one reading's distance from the base's mean.
    double variance(const EdgeStatistics& base, double extra_sigma) const {
        const double sigma = base.vertical ? base_->height_sigma : base_->width_sigma;
        const double one_step = step(base.vertical);
        const double one = (base.opening ? 2 : 1) * (sigma * sigma + extra_sigma * extra_sigma) +
                           one_step * one_step / 12;
        return one + base.variance() / static_cast<double>(base.count);
    }

    std::vector<double> waits_;
    std::optional<Base> base_;
    Codes away_;
    std::vector<Reading> back_;
};

class ReturnError final : public Returning {
  public:
    explicit ReturnError(const ProbeInput& input)
        : Returning(item::return_error, std::vector<double>(return_count, return_wait_s), input) {}

    PreflightItem item() const override {
        if (!ready()) return not_ready();
        PreflightItem out = blank();
        const PreflightLimits& limits = input_.setup.limits;
        out.expected = limits_text(limits.return_mv, limits.return_ui);
        const Kept kept = without_strays(back_, problem_.noise);
        const std::vector<EdgeStatistics> edges = edge_statistics(kept.readings);
        if (edges.empty()) {
            out.result = ItemResult::failed;
            out.found = "the eye did not open again each time its codes came back";
            out.advice =
                "Check lock and the board file's apply sequence: order of writes, strobe, "
                "loops held, wait for lock";
            return out;
        }
        const Moved height = moved(edges, true), width = moved(edges, false);
        out.values = values_of(edges);
        out.values["height_sigma_mv"] = height.sigma;
        out.values["width_sigma_ui"] = width.sigma;
        out.found = "moved by " + plus_minus(height.sigma, width.sigma) +
                    " (1 sigma of one edge), " + std::to_string(kept.readings.size()) + " returns";
        out.result = ItemResult::passed;
        if (beyond(edges, true, limits.return_mv) || beyond(edges, false, limits.return_ui)) {
            out.result = ItemResult::failed;
            out.advice =
                "The chip does not come back to where it was: hold its loops while codes "
                "are written, or state the limit in the board file that you accept";
        }
        return out;
    }

  private:
    struct Moved {
        double sigma = 0;
    };

    // What is left of the distance from the base once its own noise is taken off.
    Moved moved(const std::vector<EdgeStatistics>& edges, bool vertical) const {
        double sum = 0, count = 0;
        for (const EdgeStatistics& edge : edges) {
            const EdgeStatistics* base = base_->find(edge.name);
            if (edge.vertical != vertical || base == nullptr) continue;
            const auto n = static_cast<double>(edge.count);
            const double off = edge.mean - base->mean;
            sum +=
                (edge.deviations + n * off * off - n * variance(*base, 0)) / (edge.opening ? 2 : 1);
            count += n;
        }
        return {count > 0 ? std::sqrt(std::max(0.0, sum / count)) : 0};
    }
    // Whether the distances are larger than noise and a return error at its limit explain.
    bool beyond(const std::vector<EdgeStatistics>& edges, bool vertical,
                const std::optional<double>& limit) const {
        if (!limit) return false;
        double sum = 0, count = 0;
        for (const EdgeStatistics& edge : edges) {
            const EdgeStatistics* base = base_->find(edge.name);
            if (edge.vertical != vertical || base == nullptr) continue;
            const auto n = static_cast<double>(edge.count);
            const double off = edge.mean - base->mean;
            sum += (edge.deviations + n * off * off) / std::max(variance(*base, *limit), 1e-24);
            count += n;
        }
        return larger_spread_chance(sum, count, 1) < significance;
    }
};

// A reading that was hit by a burst looks as if its codes were still moving: what looks too slow is
// measured once more.
class SettleTime final : public Returning {
  public:
    explicit SettleTime(const ProbeInput& input)
        : Returning(item::settle_time, {waits_s.begin(), waits_s.end()}, input) {
        limit_s_ = input_.setup.limits.settle_s.value_or(0);
    }

    std::vector<Request> propose(Condition now) override {
        if (rounds_ >= most_rounds || (rounds_ > 0 && in_time())) return {};
        back_.clear();
        return Returning::propose(now);
    }
    void observe(std::span<const Reading> readings) override {
        ++rounds_;
        Returning::observe(readings);
        first_ = back_.size();
        while (first_ > 0 && still(back_[first_ - 1])) --first_;
    }
    PreflightItem item() const override {
        if (!ready()) return not_ready();
        PreflightItem out = blank();
        out.expected = limit_s_ > 0 ? "still after at most " + general(limit_s_, 3) +
                                          " s more than the apply sequence takes"
                                    : "still once the apply sequence is through";
        const bool never = first_ == waits_.size();
        out.values["extra_wait_s"] = never ? waits_.back() : waits_[first_];
        out.values["settles"] = never ? 0 : 1;
        out.result = in_time() ? ItemResult::passed : ItemResult::failed;
        if (first_ == 0) {
            out.found = "readings are the same from the end of the apply sequence on";
        } else if (never) {
            out.found = "readings still differ " + general(waits_.back(), 1) +
                        " s after the codes came back";
        } else {
            out.found = "readings are the same from " + general(waits_[first_], 1) +
                        " s after the apply sequence on";
        }
        if (!in_time()) {
            out.advice =
                "Lengthen the pause at the end of the board file's apply sequence, so "
                "that the search does not read codes that are still moving";
        }
        return out;
    }

  private:
    static constexpr int most_rounds = 2;

    bool in_time() const { return first_ < waits_.size() && waits_[first_] <= limit_s_; }
    bool still(const Reading& reading) const {
        const std::vector<EdgeStatistics> edges = edge_statistics(std::span(&reading, 1));
        if (edges.empty()) return false;
        const auto compared = static_cast<double>(edges.size() * waits_.size());
        const double far = normal_q(significance / compared);
        const double back_height = value_of(item::return_error, "height_sigma_mv");
        const double back_width = value_of(item::return_error, "width_sigma_ui");
        return std::all_of(edges.begin(), edges.end(), [&](const EdgeStatistics& edge) {
            const EdgeStatistics* base = base_->find(edge.name);
            if (base == nullptr) return true;
            const double sigma =
                std::sqrt(variance(*base, edge.vertical ? back_height : back_width));
            return std::abs(edge.mean - base->mean) <= far * std::max(sigma, 1e-12);
        });
    }
    double value_of(const char* name, const char* value) const {
        const PreflightItem* earlier = before(name);
        if (earlier == nullptr) return 0;
        const auto found = earlier->values.find(value);
        return found == earlier->values.end() ? 0 : found->second;
    }

    double limit_s_ = 0;
    int rounds_ = 0;
    std::size_t first_ = 0;  // of the waits after which all readings are the same
};

}  // namespace

Decision Probe::conclude() const {
    Decision decision;
    const PreflightItem concluded = item();
    if (concluded.codes) decision.codes = *concluded.codes;
    decision.unchanged = true;
    decision.reason = concluded.name + ": " + concluded.found;
    return decision;
}

std::unique_ptr<Probe> make_probe(const std::string& name, const ProbeInput& input) {
    if (name == item::open_codes) return std::make_unique<OpenCodes>(input);
    if (name == item::monitor) return make_monitor_probe(input);
    if (name == item::repeatability) {
        return std::make_unique<Repeats>(item::repeatability, repeat_count, input);
    }
    if (name == item::return_error) return std::make_unique<ReturnError>(input);
    if (name == item::settle_time) return std::make_unique<SettleTime>(input);
    if (name == item::alone) return std::make_unique<Repeats>(item::alone, pair_count, input);
    if (name == item::together) {
        return std::make_unique<Repeats>(item::together, pair_count, input);
    }
    return nullptr;
}

double preflight_cost_at_most_s(double reading_s, std::size_t lanes) {
    constexpr std::size_t monitor_readings = 4;  // of a latching monitor, looked at twice
    constexpr std::size_t settle_rounds = 2;
    std::size_t readings = lanes * monitor_readings;
    double waits = return_count * return_wait_s;
    for (const double wait : waits_s) waits += settle_rounds * wait;
    readings += most_codes_tried + repeat_count + 2 * return_count;
    readings += 2 * settle_rounds * waits_s.size();
    if (lanes > 1) readings += most_codes_tried + 4 * pair_count;
    return static_cast<double>(readings) * reading_s + waits;
}

std::string settings_of(const MarginWanted& reading) {
    return "error ratio " + general(reading.error_ratio, 4) + ", " +
           std::to_string(reading.dwell_bits) + " bits";
}

}  // namespace lanewright
