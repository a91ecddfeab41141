#include "adapt/search/finalists.hpp"

#include <algorithm>
#include <cmath>
#include <limits>

#include "adapt/search/score.hpp"
#include "adapt/search/text.hpp"

namespace lanewright {
namespace {

constexpr std::size_t most_rounds = 3;
constexpr std::size_t most_seats = 4;  // three and the present codes, or four
constexpr std::size_t most_share = 12;
constexpr double significant_z = 1.645;  // one-sided 5 % of the normal distribution

// Readings after the one that chose these codes.
std::size_t read_again(const Ledger& ledger, const Codes& codes) {
    const auto* entry = ledger.find(codes);
    return entry == nullptr ? 0 : entry->readings.size() - 1;
}

bool opens(const Ledger& ledger, const Codes& codes) {
    const auto* entry = ledger.find(codes);
    return entry != nullptr && entry->first.rank == 2;
}

std::vector<Codes> finalists(const LaneProblem& problem, const Ledger& ledger, std::size_t share) {
    std::vector<Codes> chosen = ledger.ranking();
    std::erase_if(chosen, [&](const Codes& codes) { return !opens(ledger, codes); });
    const bool rival = problem.allow_unchanged && opens(ledger, problem.present) &&
                       problem.space->allows(problem.present);
    // One round of everybody must fit: the present codes first, as they are what is compared with.
    const std::size_t seats = std::min(share, most_seats);
    const auto present = std::find(chosen.begin(), chosen.end(), problem.present);
    if (rival && present != chosen.end()) {
        const auto place = static_cast<std::size_t>(present - chosen.begin());
        if (place >= seats && seats >= 2) {
            chosen.erase(present);
            chosen.insert(chosen.begin() + static_cast<std::ptrdiff_t>(seats) - 1, problem.present);
        }
    }
    if (chosen.size() > seats) chosen.resize(seats);
    return chosen;
}

struct Standing {
    Codes codes;
    Score score;
    std::size_t readings = 0;
    bool again = false;
};

Standing standing_of(const LaneProblem& problem, const Ledger& ledger, const Codes& codes) {
    Standing standing{codes, {}, 0, false};
    const auto* entry = ledger.find(codes);
    if (entry == nullptr) return standing;
    std::span<const Reading> readings = entry->readings;
    standing.again = readings.size() > 1;
    if (standing.again) readings = readings.subspan(1);
    standing.readings = readings.size();
    standing.score = score_of(mean_of(readings, problem.noise), problem.required);
    return standing;
}

// How many standard errors the better one lies above the other; infinite where the other has no
// margin at all to compare with, below zero where nothing can be shown.
double advantage(const Standing& better, const Standing& other) {
    constexpr double infinity = std::numeric_limits<double>::infinity();
    if (!(better.score.value > 0)) return -infinity;
    if (other.score.status == Status::no_lock) return infinity;
    if (other.score.bound == Bound::at_least) return -infinity;
    if (other.score.bound == Bound::at_most) {
        // Only its upper limit is known.
        return (better.score.value - other.score.high) / std::max(better.score.std_error, 1e-12);
    }
    const double error = std::hypot(better.score.std_error, other.score.std_error);
    const double difference = better.score.value - other.score.value;
    if (!(error > 0)) return difference > 0 ? infinity : -infinity;
    return difference / error;
}

std::string range_of(const Score& score) {
    const std::string high = fixed(score.high, 2);
    if (!std::isfinite(score.high)) return "above " + fixed(score.low, 2);
    if (!std::isfinite(score.low)) return "below " + high;
    return fixed(score.low, 2) + " to " + high;
}

// "3.33 (3.25 to 3.44)", "closed", "no lock"
std::string described(const Standing& standing) {
    const Score& score = standing.score;
    if (score.status == Status::no_lock) return "no lock";
    if (score.bound == Bound::at_most) return "closed";
    if (!std::isfinite(score.value)) return "unknown";
    const std::string bound = score.bound == Bound::at_least ? "at least " : "";
    return bound + fixed(score.value, 2) + " (" + range_of(score) + ")";
}

std::string readings_of(const Standing& standing) {
    const std::string count = std::to_string(standing.readings);
    return count + (standing.readings == 1 ? " reading" : " readings");
}

// "score 3.33 (3.25 to 3.44) against 2.88 (2.79 to 2.99), 3 readings each"
std::string compared(const Standing& one, const Standing& other) {
    const std::string scores = "score " + described(one) + " against " + described(other) + ", ";
    if (one.readings == other.readings) return scores + readings_of(one) + " each";
    return scores + readings_of(one) + " against " + std::to_string(other.readings);
}

Choice keep(const LaneProblem& problem, std::string reason) {
    return {problem.present, true, std::move(reason)};
}

}  // namespace

std::size_t finalist_share(std::size_t total_readings) {
    const std::size_t share = std::min(total_readings / 4, most_share);
    return share < 2 ? 0 : share;  // one reading alone compares nothing
}

std::vector<Codes> next_finalists(const LaneProblem& problem, const Ledger& ledger,
                                  std::size_t share) {
    auto chosen = finalists(problem, ledger, share);
    if (chosen.size() < 2) return {};
    const std::size_t rounds = std::min(most_rounds, share / chosen.size());
    std::size_t done = most_rounds;
    for (const auto& codes : chosen) done = std::min(done, read_again(ledger, codes));
    if (done >= rounds) return {};
    std::erase_if(chosen, [&](const Codes& codes) { return read_again(ledger, codes) > done; });
    if (done % 2 == 1) std::reverse(chosen.begin(), chosen.end());
    return chosen;
}

Choice choose(const LaneProblem& problem, const Ledger& ledger) {
    const auto ranking = ledger.ranking();
    if (ranking.empty()) return keep(problem, "nothing was read: the present codes stay");
    if (!opens(ledger, ranking.front())) {
        return keep(problem, "no codes that were read open the eye: the present codes stay");
    }
    // Codes read again stand before those read once: their means carry no luck of the draw.
    std::vector<Standing> standings;
    for (const auto& codes : ranking) {
        if (read_again(ledger, codes) > 0) {
            standings.push_back(standing_of(problem, ledger, codes));
        }
    }
    if (standings.empty()) standings.push_back(standing_of(problem, ledger, ranking.front()));
    const auto best = *std::max_element(
        standings.begin(), standings.end(), [](const Standing& a, const Standing& b) {
            return a.score.value < b.score.value;  // the first of equals: the better ranked
        });
    const std::string alone = "score " + described(best) + ", " + readings_of(best);
    if (best.codes == problem.present) {
        return keep(problem, "the present codes are the best that were read: " + alone);
    }
    const bool rival = problem.space->allows(problem.present) && ledger.was_read(problem.present);
    if (!problem.allow_unchanged || !rival) {
        return {best.codes, false, "best of what was read: " + alone};
    }
    const auto present = standing_of(problem, ledger, problem.present);
    const double z = advantage(best, present);
    const std::string both = compared(best, present);
    if (!(z > significant_z)) {
        return keep(problem,
                    "nothing is significantly better than the present codes: best " + both);
    }
    if (present.score.status == Status::no_lock || present.score.bound == Bound::at_most) {
        return {best.codes, false, "open, where the present codes are not: " + both};
    }
    const std::string by = std::isfinite(z) ? " by " + fixed(z, 1) + " standard errors: "
                                            : std::string(", and no spread is known: ");
    return {best.codes, false, "better than the present codes" + by + both};
}

}  // namespace lanewright
