#pragma once
// Purpose:   whether a lane meets its requirement, and what it would take to tell.
// Ownership: pure functions on values.
// Threads:   any.

#include <cstdint>
#include <optional>
#include <span>
#include <string>

#include "adapt/search/procedure.hpp"
#include "adapt/search/score.hpp"

namespace lanewright {

enum class Verdict : std::uint8_t { meets, fails, undecided };

const char* name_of(Verdict verdict);

struct Judgement {
    Verdict verdict = Verdict::undecided;
    Score score;
    // Only if undecided: further bench time after which the limits are expected to clear 1, if the
    // score stays where it is; empty where more readings of this kind cannot decide.
    std::optional<double> deciding_s;
    std::string reason;  // one sentence for people
};

// From fresh readings of one set of codes only: meets if the lower 95 % limit of the score is at
// least 1, fails if the upper one is below 1, else undecided. An extrapolated score never meets
// unless `accept_extrapolated`, and the reason then says so. Readings at a higher error ratio than
// the required one can fail but not meet, readings at a lower one can meet but not fail. No
// readings: undecided.
Judgement judge(std::span<const Reading> readings, const Required& required,
                const MonitorNoise& noise, bool accept_extrapolated);

}  // namespace lanewright
