#include "adapt/search/verdict.hpp"

#include <algorithm>
#include <limits>
#include <vector>

#include "adapt/search/text.hpp"

namespace lanewright {
namespace {

bool decided(const Score& score) {
    return score.low >= 1 || score.high < 1;
}

// The readings as if they had been taken `times` over, each copy weighing the same: the mean stays
// and its passing variance shrinks.
Score score_if_repeated(std::span<const Reading> readings, const Required& required,
                        const MonitorNoise& noise, std::size_t times) {
    std::vector<Reading> repeated;
    repeated.reserve(readings.size() * times);
    for (std::size_t i = 0; i < times; ++i) {
        repeated.insert(repeated.end(), readings.begin(), readings.end());
    }
    return score_of(mean_of(repeated, noise), required);
}

// The smallest number of repetitions (by doubling, then halving the gap) that would decide.
std::optional<double> deciding_time_s(std::span<const Reading> readings, const Required& required,
                                      const MonitorNoise& noise, double cost_of_all_s) {
    constexpr std::size_t most = 1024;
    const auto decides = [&](std::size_t times) {
        return decided(score_if_repeated(readings, required, noise, times));
    };
    std::size_t enough = 2;
    while (enough <= most && !decides(enough)) enough *= 2;
    if (enough > most) return std::nullopt;
    std::size_t short_of = enough / 2;
    while (enough - short_of > 1) {
        const std::size_t middle = short_of + (enough - short_of) / 2;
        (decides(middle) ? enough : short_of) = middle;
    }
    return static_cast<double>(enough - 1) * cost_of_all_s;
}

struct RatiosRead {
    double lowest = std::numeric_limits<double>::infinity(), highest = 0;
};

RatiosRead ratios_of(std::span<const Reading> readings) {
    RatiosRead ratios;
    for (const auto& reading : readings) {
        if (reading.status == Status::void_reading) continue;
        ratios.lowest = std::min(ratios.lowest, reading.error_ratio);
        ratios.highest = std::max(ratios.highest, reading.error_ratio);
    }
    return ratios;
}

// The limit is clear of 1; what may still stand against a verdict. Sets verdict and reason.
void judge_clear(Judgement& judgement, const RatiosRead& ratios, double required_ratio,
                 bool extrapolated, bool accept_extrapolated, bool no_lock) {
    constexpr double rounding = 1e-9;
    const auto& score = judgement.score;
    const bool passes = score.low >= 1;
    const bool easier = ratios.highest > required_ratio * (1 + rounding);
    const bool harder = ratios.lowest < required_ratio * (1 - rounding);
    if (no_lock && !passes) {
        judgement.verdict = Verdict::fails;
        judgement.reason = "the receiver does not hold lock";
        return;
    }
    if (passes ? easier : harder) {
        judgement.reason = "read at an error ratio of " +
                           general(passes ? ratios.highest : ratios.lowest, 3) +
                           ", where this proves nothing at " + general(required_ratio, 3);
        return;
    }
    if (passes && extrapolated && !accept_extrapolated) {
        judgement.reason = "the margin is extrapolated, which the recipe does not accept as proof";
        return;
    }
    judgement.verdict = passes ? Verdict::meets : Verdict::fails;
    judgement.reason =
        passes ? "the lower 95 % limit of the score is " + fixed(score.low, 3)
               : "the upper 95 % limit of the score, " + fixed(score.high, 3) + ", is below 1";
    if (extrapolated) judgement.reason += " (extrapolated)";
}

}  // namespace

const char* name_of(Verdict verdict) {
    switch (verdict) {
        case Verdict::meets:
            return "meets";
        case Verdict::fails:
            return "fails";
        case Verdict::undecided:
            break;
    }
    return "undecided";
}

Judgement judge(std::span<const Reading> readings, const Required& required,
                const MonitorNoise& noise, bool accept_extrapolated) {
    Judgement judgement;
    const Reading mean = mean_of(readings, noise);
    judgement.score = score_of(mean, required);
    const auto& score = judgement.score;
    if (mean.status == Status::void_reading) {
        judgement.reason = "there is no fresh reading to judge by";
        return judgement;
    }
    if (decided(score)) {
        // Carried along its slopes, the score is one at the required ratio.
        const bool carried = score.basis == Basis::extrapolated && mean.basis == Basis::counted;
        const double there = required.error_ratio;
        judge_clear(judgement, carried ? RatiosRead{there, there} : ratios_of(readings), there,
                    score.basis == Basis::extrapolated, accept_extrapolated,
                    mean.status == Status::no_lock);
        return judgement;
    }
    judgement.deciding_s = deciding_time_s(readings, required, noise, mean.cost_s);
    judgement.reason = "1 lies within the 95 % limits of the score, " + fixed(score.low, 3) +
                       " to " + fixed(score.high, 3);
    judgement.reason += judgement.deciding_s ? "; about " + general(*judgement.deciding_s, 3) +
                                                   " s more bench time would decide"
                                             : "; more readings of this kind would not decide";
    return judgement;
}

}  // namespace lanewright
