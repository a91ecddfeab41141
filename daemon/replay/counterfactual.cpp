#include "daemon/replay/counterfactual.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <memory>
#include <utility>
#include <variant>

#include "adapt/search/text.hpp"
#include "drivers/board/sequences.hpp"

namespace lanewright {

namespace {

// A lane found with these codes, for the machine that starts from them.
SavedLane found_with(Lane lane, const Codes& codes) {
    SavedLane saved;
    saved.lane = lane;
    for (const std::int32_t code : codes.value) {
        SavedField field;
        field.role = Role::tuned;
        field.value = static_cast<std::uint32_t>(code);
        saved.fields.push_back(std::move(field));
    }
    return saved;
}

// The error ratio that the board's monitor would be told for a wish.
double told_ratio(const BoardFile& board, double wanted) {
    if (!uses(board.monitor.sequence, Parameter::ratio_exponent)) return wanted;
    return std::pow(10.0, -static_cast<double>(ratio_exponent_of(wanted)));
}

struct Attempt {
    std::optional<Decision> decision;
    Codes missing;      // asked for, never read; empty: something else, see `cause`
    std::string cause;  // why it can go no further in any way
};

// One start of the strategy, until it decides or asks for what the log does not hold.
Attempt attempt(const ReplayProblem& problem, std::shared_ptr<const CodeList> list,
                Answers& answers) {
    LaneSetup setup = problem.setup;
    const Lane lane = setup.problem.lane;
    setup.space = CodeSpace(setup.space.dimensions(), setup.space.forbidden(), std::move(list));
    LaneMachine machine(std::move(setup));
    machine.apply(LaneSaved{found_with(lane, problem.present)});
    for (;;) {
        Action action = machine.next();
        if (auto* decide = std::get_if<DoDecide>(&action)) {
            return {std::move(decide->decision), {}, {}};
        }
        auto* measure = std::get_if<DoMeasure>(&action);
        if (measure == nullptr) return {{}, {}, "the strategy came to no decision"};
        if (!std::holds_alternative<MarginWanted>(measure->request.what)) {
            return {{}, {}, "the strategy asks for single looks; the log holds margins"};
        }
        const Reading* reading = answers.next(measure->request.codes, problem.told_ratio);
        if (reading == nullptr) return {{}, std::move(measure->request.codes), {}};
        const std::uint32_t ordinal = measure->ordinal;
        machine.apply(Intent{lane, ordinal, 0, measure->stage, std::move(measure->request)});
        machine.apply(ReadingTaken{lane, ordinal, 0, *reading, {}});
    }
}

std::shared_ptr<const CodeList> left_out(const std::vector<Codes>& codes) {
    return std::make_shared<const CodeList>(CodeList{{codes.begin(), codes.end()}, false});
}

std::shared_ptr<const CodeList> only_logged(const ReadingLog& log, double ratio) {
    CodeList list;
    list.only = true;
    for (const auto& [codes, numbers] : log.all()) {
        if (!log.at(codes, ratio).empty()) list.codes.insert(codes);
    }
    return std::make_shared<const CodeList>(std::move(list));
}

bool holds_ratio(const ReadingLog& log, double ratio) {
    const std::vector<double> ratios = log.error_ratios();
    return std::any_of(ratios.begin(), ratios.end(),
                       [ratio](double logged) { return same_ratio(logged, ratio); });
}

std::string ratio_missing(const ReadingLog& log, double wanted) {
    std::string text;
    for (const double ratio : log.error_ratios()) {
        text += (text.empty() ? "" : ", ") + general(ratio, 3);
    }
    return "the log holds no reading at an error ratio of " + general(wanted, 3) +
           ", at which the recipe reads; it holds readings at " + text +
           ". Set the recipe's search_error_ratio to one of these";
}

// Starts the strategy until it comes through on what was read.
Answers decide(const ReplayProblem& problem, const ReadingLog& log, ReplayedLane& lane) {
    for (std::size_t start = 0;; ++start) {
        lane.rest_left_out = start >= most_starts;
        Answers answers(log);
        Attempt one = attempt(problem,
                              lane.rest_left_out ? only_logged(log, problem.told_ratio)
                              : start == 0       ? nullptr
                                                 : left_out(lane.never_read),
                              answers);
        lane.decision = std::move(one.decision);
        lane.cause = std::move(one.cause);
        if (!one.missing.value.empty()) {
            if (!lane.same_until) lane.same_until = answers.handed_out();
            lane.never_read.push_back(std::move(one.missing));
            if (!lane.rest_left_out) continue;
            lane.cause = "the strategy asks for codes that it is not allowed to";
        }
        lane.handed_out = answers.handed_out();
        lane.again = answers.again();
        const std::size_t missing = lane.never_read.size();
        if (lane.decision && wants_data(answers.code_count(), missing)) {
            lane.decision.reset();
            lane.cause = std::to_string(missing) + " of " +
                         std::to_string(missing + answers.code_count()) +
                         " codes asked for were never read" +
                         (lane.rest_left_out ? ", and more were left unasked" : "") +
                         ". The log is too thin for this recipe: replay it with one nearer to the "
                         "run's own, or read more codes";
        }
        return answers;
    }
}

std::optional<Noisy> noisy(const Score& score) {
    const bool usable = score.bound == Bound::exact && std::isfinite(score.value) &&
                        std::isfinite(score.std_error) && score.std_error > 0 &&
                        score.status != Status::no_lock;
    if (!usable) return std::nullopt;
    return Noisy{score.value, score.std_error};
}

// The error ratio at which the score of such a mean holds: where it was read, or the required one
// where its edges are carried there.
double ratio_of_score(const Reading& mean, const Score& score, const Required& required) {
    const bool is_carried = score.basis == Basis::extrapolated && mean.slopes &&
                            mean.status != Status::no_lock &&
                            required.error_ratio < mean.error_ratio;
    return is_carried ? required.error_ratio : mean.error_ratio;
}

SelectedMargin selected_margin(const ReplayProblem& problem, const Answers& answers,
                               const LogScores& scores, const Codes& codes) {
    const LaneProblem& lane = problem.setup.problem;
    SelectedMargin out;
    const std::vector<Reading> chosen_by = answers.readings(codes, problem.told_ratio, true);
    out.mean = mean_of(chosen_by, lane.noise);
    out.raw = score_of(out.mean, lane.required);
    out.error_ratio = ratio_of_score(out.mean, out.raw, lane.required);
    const std::optional<Noisy> own = noisy(out.raw);
    if (!own) {
        out.why_not = "the score is a bound, not a value";
        return out;
    }
    std::vector<Noisy> all = scores.scores;
    const auto place = scores.place.find(codes);
    const std::size_t at = place == scores.place.end() ? all.size() : place->second;
    if (at == all.size()) all.emplace_back();
    all[at] = *own;
    const Posterior posterior = shrunk(all, at);
    out.compared_with = posterior.compared_with;
    if (posterior.compared_with < 2) {
        out.why_not = "no other code of the log scores near it: nothing to tell luck by";
        return out;
    }
    out.score = posterior.mean;
    out.std_error = posterior.std_error;
    return out;
}

void judge_afresh(const ReplayProblem& problem, const Answers& answers, const Codes& codes,
                  ReplayedLane& lane) {
    std::vector<Reading> fresh = answers.readings(codes, problem.told_required, false);
    if (fresh.empty() && problem.accept_extrapolated) {
        fresh = answers.readings(codes, problem.told_ratio, false);
        const bool carries = std::all_of(fresh.begin(), fresh.end(), [](const Reading& reading) {
            return reading.slopes.has_value();
        });
        if (!carries) fresh.clear();
    }
    lane.fresh_count = fresh.size();
    const bool known = std::all_of(fresh.begin(), fresh.end(),
                                   [](const Reading& reading) { return reading.error_ratio > 0; });
    if (fresh.empty() || !known) return;
    const LaneProblem& of = problem.setup.problem;
    lane.fresh = judge(fresh, of.required, of.noise, problem.accept_extrapolated);
    lane.fresh_mean = mean_of(fresh, of.noise);
    lane.fresh_error_ratio = ratio_of_score(lane.fresh_mean, lane.fresh->score, of.required);
}

}  // namespace

bool wants_data(std::size_t read, std::size_t missing) {
    return missing > read && (read <= 2 || 9 * read < missing);
}

ReplayProblem replay_problem_of(const BoardFile& board, const Recipe& recipe, Lane lane,
                                std::uint64_t seed, Codes present) {
    ReplayProblem problem;
    problem.setup = lane_setup_of(board, recipe, lane, seed);
    problem.present = std::move(present);
    problem.told_ratio = told_ratio(board, recipe.search_error_ratio);
    problem.told_required = told_ratio(board, recipe.required.error_ratio);
    problem.accept_extrapolated = recipe.accept_extrapolated;
    // A log cannot vouch for itself: looking at the reference again would show nothing.
    problem.setup.reference_every = std::numeric_limits<std::uint32_t>::max();
    problem.setup.reference_every_s = std::numeric_limits<double>::infinity();
    return problem;
}

LogScores scores_of(const ReplayProblem& problem, const ReadingLog& log) {
    const LaneProblem& lane = problem.setup.problem;
    // In order of codes: sums over them must not depend on the order of a hash table.
    std::vector<const Codes*> order;
    for (const auto& [codes, numbers] : log.all()) order.push_back(&codes);
    std::sort(order.begin(), order.end(),
              [](const Codes* one, const Codes* other) { return *one < *other; });
    LogScores out;
    for (const Codes* codes : order) {
        std::vector<Reading> readings;
        for (const std::uint32_t number : log.at(*codes, problem.told_ratio)) {
            readings.push_back(log.reading(number));
        }
        if (readings.empty()) continue;
        const auto value = noisy(score_of(mean_of(readings, lane.noise), lane.required));
        if (!value) continue;
        out.place.emplace(*codes, out.scores.size());
        out.scores.push_back(*value);
    }
    return out;
}

ReplayedLane replay_lane(const ReplayProblem& problem, const ReadingLog& log,
                         const LogScores& scores) {
    ReplayedLane lane;
    lane.lane = number(problem.setup.problem.lane);
    lane.logged_readings = log.reading_count();
    lane.logged_codes = log.code_count();
    lane.present = problem.present;
    if (!holds_ratio(log, problem.told_ratio)) {
        lane.cause = ratio_missing(log, problem.told_ratio);
        return lane;
    }
    const Answers answers = decide(problem, log, lane);
    if (!lane.decision) return lane;
    const Codes& codes = lane.decision->codes;
    lane.read_at = problem.told_ratio;
    const std::vector<double> ratios = log.error_ratios();
    if (!ratios.empty() && ratios.back() == 0) lane.read_at = 0;  // nobody knows any of them
    if (!answers.readings(codes, problem.told_ratio, true).empty()) {
        lane.selected = selected_margin(problem, answers, scores, codes);
    }
    judge_afresh(problem, answers, codes, lane);
    return lane;
}

std::vector<ReplayedLane> replay_with(const BoardFile& board, const Recipe& recipe,
                                      const std::vector<std::uint16_t>& run_lanes,
                                      std::uint64_t seed, const RunState& state) {
    std::vector<ReplayedLane> report;
    for (const std::uint16_t number_of_lane : recipe.lanes.value_or(run_lanes)) {
        ReplayedLane lane;
        lane.lane = number_of_lane;
        const auto found = state.lanes.find(number_of_lane);
        if (found == state.lanes.end() || found->second.readings.empty()) {
            lane.cause = "the run holds no reading of this lane";
        } else if (!found->second.saved) {
            lane.cause = "the run does not say which codes the lane was found with";
        } else {
            const ReadingLog log(found->second.readings);
            ReplayProblem problem = replay_problem_of(board, recipe, Lane{number_of_lane}, seed,
                                                      *found->second.former());
            // As the run's own strategy was told.
            if (found->second.noise) problem.setup.problem.noise = found->second.noise->noise;
            lane = replay_lane(problem, log, scores_of(problem, log));
        }
        if (found != state.lanes.end() && found->second.decision) {
            lane.then = found->second.decision->codes;
        }
        report.push_back(std::move(lane));
    }
    return report;
}

}  // namespace lanewright
