#include "adapt/search/verdict.hpp"

#include <algorithm>
#include <cmath>
#include <vector>

#include "adapt/search/text.hpp"

namespace lanewright {
namespace {

bool decided(const Score& score) { return score.low >= 1 || score.high < 1; }

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

}  // namespace

const char* name_of(Verdict verdict) {
    switch (verdict) {
        case Verdict::meets: return "meets";
        case Verdict::fails: return "fails";
        case Verdict::undecided: break;
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
    if (score.high < 1) {
        judgement.verdict = Verdict::fails;
        judgement.reason = mean.status == Status::no_lock && !std::isfinite(score.value)
                               ? "the receiver does not hold lock"
                               : "the upper 95 % limit of the score, " + fixed(score.high, 3) + ", is below 1";
        return judgement;
    }
    if (score.low >= 1) {
        const bool easier = mean.error_ratio > required.error_ratio * (1 + 1e-9);
        const bool extrapolated = mean.basis == Basis::extrapolated;
        if (easier) {
            judgement.reason = "read at an error ratio of " + general(mean.error_ratio, 3) +
                               ", which proves nothing at " + general(required.error_ratio, 3);
        } else if (extrapolated && !accept_extrapolated) {
            judgement.reason =
                "the margin is extrapolated, which the recipe does not accept as proof";
        } else {
            judgement.verdict = Verdict::meets;
            judgement.reason = "the lower 95 % limit of the score is " + fixed(score.low, 3);
            if (extrapolated) judgement.reason += "; extrapolated, which the recipe accepts";
        }
        return judgement;
    }
    judgement.deciding_s = deciding_time_s(readings, required, noise, mean.cost_s);
    judgement.reason = "1 lies within the 95 % limits of the score, " + fixed(score.low, 3) +
                       " to " + fixed(score.high, 3);
    judgement.reason += judgement.deciding_s
                            ? "; about " + general(*judgement.deciding_s, 3) +
                                  " s more bench time would decide"
                            : "; more readings of this kind would not decide";
    return judgement;
}

}  // namespace lanewright
