// check --measure: is the board fit to be searched? All of the preflight, and nothing else.

#include <unistd.h>

#include <algorithm>
#include <cmath>
#include <nlohmann/json.hpp>

#include "daemon/cli/board_at_hand.hpp"
#include "daemon/cli/commands.hpp"
#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/progress.hpp"
#include "daemon/cli/run_words.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/engine/tune.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/preflight_views.hpp"
#include "daemon/views/run_text.hpp"
#include "drivers/io/shutdown.hpp"

namespace lanewright {

namespace {

using json = nlohmann::ordered_json;

// Where no recipe says at which error ratio and dwell a search will read.
constexpr double usual_error_ratio = 1e-6;
constexpr double usual_dwell_s = 0.1;

// What a run must have; of it only error ratio, dwell and dimensions matter here.
std::string recipe_for(const BoardFile& board) {
    json dimensions = json::array();
    for (const DimensionDescription& dimension : board.dimensions) {
        dimensions.push_back(dimension.name);
    }
    const double ratio = std::max(usual_error_ratio, board.monitor.lowest_error_ratio);
    return json{{"format", "lanewright-recipe/1"},
                {"name", "preflight"},
                {"description", "made by check --measure: nothing is searched"},
                {"lanes", "all"},
                {"dimensions", std::move(dimensions)},
                {"required", {{"error_ratio", ratio}, {"height_mv", 1}, {"width_ui", 0.01}}},
                {"search_error_ratio", ratio},
                {"strategy", {{"name", "descent"}}},
                {"dwell_s", usual_dwell_s},
                {"afterwards", "restore"}}
        .dump(1);
}

std::optional<Recipe> recipe_of(const CheckOptions& options, const BoardFile& board,
                                Complaints& complaints) {
    std::optional<Recipe> recipe;
    if (!options.recipe_path.empty()) {
        recipe = load_recipe(options.recipe_path, complaints);
    } else if (auto made = Document::parse(recipe_for(board), "check --measure", complaints)) {
        recipe = decode_recipe(*made, complaints);
    }
    if (!recipe) return {};
    recipe->afterwards = Afterwards::restore;
    std::vector<std::string_view> names;
    for (const StrategyEntry& entry : strategies()) names.push_back(entry.name);
    check_recipe_against_board(*recipe, board, names, complaints);
    return recipe;
}

struct MeasureJob {
    BoardAtHand at_hand;
    TuneRequest request;
};

Result<MeasureJob> prepare(const CheckOptions& options) {
    auto at_hand = take_board(options.board_path, options.link);
    if (!at_hand) return at_hand.error();
    Complaints complaints;
    auto recipe = recipe_of(options, at_hand->file, complaints);
    if (!recipe || complaints.any()) return fault_of(complaints);
    MeasureJob job;
    job.request.tags = tags_of(options.tags);
    job.request.lanes = lanes_of(options.lanes, *recipe, at_hand->file);
    job.request.board = at_hand->file;
    job.request.link = text_of(at_hand->file.link);
    job.request.condition = options.condition;
    job.request.only_preflight = true;
    job.request.recipe = std::move(*recipe);
    job.at_hand = std::move(*at_hand);
    return job;
}

Task<TuneOutcome> measure_at_hand(MeasureJob* job, Store* store, Workers* workers, TimeSource* time,
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

int report_measured(const RunView& view, bool as_json) {
    const bool complete = view.state.ended && view.state.ended->ending == Ending::complete;
    const bool passed = preflight_passed(view.state);
    if (as_json) {
        print(measured_json(view).dump(2, ' ', false, json::error_handler_t::replace) + "\n");
    } else {
        print(run_account(view, may_colour(STDOUT_FILENO)));
        if (complete) print(passed ? "good\n" : "NOT GOOD\n");
    }
    if (!complete) {
        print_error("lanewright: the check has not finished; all codes were put back");
        return exit_try_again;
    }
    return passed ? exit_ok : exit_not_fit;
}

int measure(const CheckOptions& options) {
    auto job = prepare(options);
    if (!job) return report(job.error(), options.json);
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    Stop stop(io);
    const ShutdownSignals signals(io, stop);
    const std::string path = options.store_path.empty() ? default_store_path() : options.store_path;
    auto store = Store::open(path, time);
    if (!store) return report(store.error(), options.json);
    Workers workers(time, 1);
    const TuneRequest& request = job->request;
    Progress progress({request.lanes, request.recipe.required, 0, 0}, is_terminal(STDERR_FILENO));
    RunId run;
    auto outcome = run_until_done(
        time, measure_at_hand(&*job, store->get(), &workers, &time, stop, &progress, &run));
    progress.finish();
    if (!outcome) return report(outcome.error(), options.json);
    const Database database(path, Database::Mode::read_only);
    return report_measured(view_of(database.find_run(outcome->run), database), options.json);
}

}  // namespace

int run_measure(const CheckOptions& options) {
    try {
        return measure(options);
    } catch (const UsageError& error) {
        return report_usage(error.what(), options.json);
    } catch (const StoreError& error) {
        return report(error.fault(), options.json);
    }
}

}  // namespace lanewright
