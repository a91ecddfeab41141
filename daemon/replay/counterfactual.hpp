#pragma once
// Purpose:   what another recipe would have decided on the readings that a run left: the strategy
//            runs as it would on a board, but the log is the board.
// Ownership: values; refers to the log for the call.
// Threads:   no shared state; lanes may be replayed at the same time.
//
// Several readings of the same codes are handed out in the order taken, then again from the first.
// Codes that were asked for and never read are taken as not allowed from the beginning: the
// strategy starts anew without them, so that its decision is one it would make where only these
// are forbidden. After `most_starts` starts every code that was never read is left out. Nothing is
// ever made up.

#include <cstdint>
#include <optional>
#include <string>
#include <unordered_map>
#include <vector>

#include "adapt/search/score.hpp"
#include "adapt/search/verdict.hpp"
#include "adapt/stats/selected.hpp"
#include "daemon/engine/lane_setup.hpp"
#include "daemon/replay/reading_log.hpp"

namespace lanewright {

constexpr std::size_t most_starts = 64;

// Whether a strategy that asked for `missing` codes in vain, and for `read` codes with an answer,
// decided by want of data: two codes or fewer, or less than a tenth of all, were there.
bool wants_data(std::size_t read, std::size_t missing);

// The decided codes were chosen as the best of many noisy ones, so their own readings flatter them.
struct SelectedMargin {
    Score raw;                    // of the readings that the strategy saw of them, each once
    Reading mean;                 // of these readings
    double error_ratio = 0;       // at which the scores hold; 0: not known
    std::optional<double> score;  // shrunk for the luck of the best; empty: cannot be told
    double std_error = 0;
    std::size_t compared_with = 0;  // codes of the log whose scores the shrinking rests on
    std::string why_not;            // where it cannot be told
};

struct ReplayedLane {
    std::uint16_t lane = 0;
    std::string cause;  // why there is no decision; empty: there is one
    std::size_t logged_readings = 0, logged_codes = 0;
    std::optional<Codes> present;  // found before the run: where the strategy starts
    std::optional<Codes> then;     // what the run itself decided
    std::optional<Decision> decision;
    std::size_t handed_out = 0, again = 0;  // readings; of these, ones handed out before
    std::vector<Codes> never_read;          // asked for, in that order, each once
    bool rest_left_out = false;             // the starts were used up
    // Readings until the strategy first asked for codes never read; empty: it never did, and did
    // on the log what it would have done on the board.
    std::optional<std::size_t> same_until;
    std::optional<SelectedMargin> selected;
    double read_at = 0;  // the error ratio of the readings; 0: not known
    // From readings of the decided codes that did not choose them, at the required error ratio or,
    // only where the recipe accepts it, carried there.
    std::optional<Judgement> fresh;
    Reading fresh_mean;
    double fresh_error_ratio = 0;  // at which that score holds
    std::size_t fresh_count = 0;
};

// What the log says of every code that has a score, once for many replays of it.
struct LogScores {
    std::vector<Noisy> scores;
    std::unordered_map<Codes, std::size_t, CodesHash> place;  // in scores
};

struct ReplayProblem {
    LaneSetup setup;           // of board and other recipe
    Codes present;             // where the strategy starts
    double told_ratio = 0;     // the ratio at which a board would have read
    double told_required = 0;  // the same for the required one
    bool accept_extrapolated = false;
};

ReplayProblem replay_problem_of(const BoardFile& board, const Recipe& recipe, Lane lane,
                                std::uint64_t seed, Codes present);

// Of every code of the log whose readings give an exact score (not a bound) with an error.
LogScores scores_of(const ReplayProblem& problem, const ReadingLog& log);

ReplayedLane replay_lane(const ReplayProblem& problem, const ReadingLog& log,
                         const LogScores& scores);

// Every lane that the recipe names, or all of the run. Lanes without saved codes or readings have a
// cause.
std::vector<ReplayedLane> replay_with(const BoardFile& board, const Recipe& recipe,
                                      const std::vector<std::uint16_t>& run_lanes,
                                      std::uint64_t seed, const RunState& state);

}  // namespace lanewright
