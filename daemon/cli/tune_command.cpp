#include <unistd.h>

#include <algorithm>
#include <charconv>
#include <limits>
#include <nlohmann/json.hpp>

#include "daemon/cli/board_at_hand.hpp"
#include "daemon/cli/commands.hpp"
#include "daemon/cli/dry_run.hpp"
#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/progress.hpp"
#include "daemon/cli/run_words.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/engine/tune.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/run_json.hpp"
#include "daemon/views/run_text.hpp"
#include "drivers/io/shutdown.hpp"

namespace lanewright {

namespace {

Recipe load_checked_recipe(const TuneOptions& options, const BoardFile& board,
                           Complaints& complaints) {
    auto recipe = load_recipe(options.recipe_path, complaints);
    if (!recipe) return {};
    std::vector<std::string_view> names;
    for (const StrategyEntry& entry : strategies()) names.push_back(entry.name);
    check_recipe_against_board(*recipe, board, names, complaints);
    return std::move(*recipe);
}

void require_tags(const Recipe& recipe, const std::map<std::string, std::string>& tags) {
    for (const std::string& key : recipe.required_tags) {
        if (!tags.contains(key)) {
            std::string text = "the recipe " + recipe.path + " requires the tag \"";
            text.append(key).append("\"; give it as --tag ").append(key).append("=VALUE");
            throw UsageError(text);
        }
    }
}

std::uint64_t seed_from(const std::string& text) {
    std::uint64_t seed = 0;
    const char* end = text.data() + text.size();
    const auto [rest, error] = std::from_chars(text.data(), end, seed);
    if (error == std::errc{} && rest == end) return seed;
    throw UsageError("--seed \"" + text + "\": expected a whole number from 0 to " +
                     std::to_string(std::numeric_limits<std::uint64_t>::max()));
}

struct TuneJob {
    BoardAtHand at_hand;
    TuneRequest request;
};

Result<TuneJob> prepare(const TuneOptions& options) {
    auto at_hand = take_board(options.board_path, options.link);
    Complaints complaints;
    if (!at_hand) {
        // The user sees what is wrong with both files at once.
        if (at_hand.error().cause != Cause::bad_config) return at_hand.error();
        Fault both = at_hand.error();
        if (!load_recipe(options.recipe_path, complaints)) {
            both.what += "\n" + fault_of(complaints).what;
        }
        return both;
    }
    Recipe recipe = load_checked_recipe(options, at_hand->file, complaints);
    if (complaints.any()) return fault_of(complaints);
    TuneJob job;
    job.request.tags = tags_of(options.tags);
    require_tags(recipe, job.request.tags);
    job.request.lanes = lanes_of(options.lanes, recipe, at_hand->file);
    job.request.board = at_hand->file;
    job.request.link = text_of(at_hand->file.link);
    job.request.seed = options.seed ? seed_from(*options.seed) : recipe.seed.value_or(1);
    job.request.condition = options.condition;
    job.request.anew = options.anew;
    job.request.recipe = std::move(recipe);
    job.at_hand = std::move(*at_hand);
    return job;
}

ProgressPlan progress_plan(const TuneRequest& request) {
    return {request.lanes, request.recipe.required, request.recipe.budget.standard_readings,
            request.recipe.budget.bench_s};
}

void say(const std::string& text) {
    print_error("lanewright: " + text);
}

Task<TuneOutcome> tune_at_hand(TuneJob* job, Store* store, Workers* workers, TimeSource* time,
                               Stop stop, Progress* progress, RunId* began) {
    auto board = co_await reach(job->at_hand.file, time);
    if (!board) co_return board.error();
    std::function<LinkCounts()> counts = [&board] { return counts_of(**board); };
    std::function<void(const std::string&)> tell = [progress](const std::string& text) {
        progress->interject("lanewright: " + text);
    };
    Endpoint& endpoint = job->at_hand.endpoint;
    Bench bench{(*board)->lanes(),    *store,     *workers, *time, stop,
                endpoint.note_path(), {progress}, counts,   tell};
    auto outcome = co_await tune_board(job->request, std::move(bench), store, &endpoint, began);
    auto closed = co_await (*board)->close();
    if (outcome && !closed) co_return closed.error();
    co_return outcome;
}

int report_run_fault(const Fault& fault, const RunId& run, bool json) {
    if (run.empty() || !json) {
        const int code = report(fault, json);
        if (!run.empty()) say("run " + run + " is in the store; the same command resumes it");
        return code;
    }
    const int code = exit_code_of(fault.cause);
    auto object = error_json(fault, code);
    object["run"] = run;
    print(object.dump(2, ' ', false, nlohmann::json::error_handler_t::replace) + "\n");
    print_error("lanewright: " + fault.text());
    return code;
}

int report_run(const RunView& view, bool json) {
    if (json) {
        print(run_json(view).dump(2, ' ', false, nlohmann::json::error_handler_t::replace) + "\n");
    } else {
        print(run_account(view, may_colour(STDOUT_FILENO)));
    }
    if (!view.state.ended || view.state.ended->ending != Ending::complete) {
        say("the run has not finished; the same command resumes it");
        return exit_try_again;
    }
    return all_meet(view) ? exit_ok : exit_not_all_meet;
}

int tune(const TuneOptions& options) {
    auto job = prepare(options);
    if (!job) return report(job.error(), options.json);
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    if (options.dry_run) return dry_run(job->at_hand, job->request, time, options.json);

    Stop stop(io);
    const ShutdownSignals signals(io, stop);
    const std::string path = options.store_path.empty() ? default_store_path() : options.store_path;
    auto store = Store::open(path, time);
    if (!store) return report(store.error(), options.json);
    Workers workers(time, options.threads);
    Progress progress(progress_plan(job->request), is_terminal(STDERR_FILENO));
    RunId run;
    auto outcome = run_until_done(
        time, tune_at_hand(&*job, store->get(), &workers, &time, stop, &progress, &run));
    progress.finish();
    if (!outcome) return report_run_fault(outcome.error(), run, options.json);
    const Database database(path, Database::Mode::read_only);
    return report_run(view_of(database.find_run(outcome->run), database), options.json);
}

}  // namespace

int run_tune(const TuneOptions& options) {
    try {
        return tune(options);
    } catch (const UsageError& error) {
        return report_usage(error.what(), options.json);
    } catch (const StoreError& error) {
        return report(error.fault(), options.json);
    }
}

}  // namespace lanewright
