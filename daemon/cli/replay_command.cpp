#include <fstream>
#include <iterator>
#include <limits>
#include <nlohmann/json.hpp>

#include "daemon/cli/board_at_hand.hpp"
#include "daemon/cli/commands.hpp"
#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/replay_views.hpp"

namespace lanewright {

namespace {

// A file larger than this is no log of margins.
constexpr std::streamoff longest_file = std::streamoff{1} << 30;

std::string path_or_default(const std::string& path) {
    return path.empty() ? default_store_path() : path;
}

void print_json(const nlohmann::ordered_json& value) {
    print(value.dump(2, ' ', false, nlohmann::json::error_handler_t::replace) + "\n");
}

Result<std::string> text_of_file(const std::string& path) {
    Fault fault;
    fault.cause = Cause::io;
    fault.hint = "Check the path and its permissions";
    std::ifstream in(path, std::ios::binary | std::ios::ate);
    if (!in) {
        fault.what = "cannot open " + path;
        return fault;
    }
    const std::streamoff size = in.tellg();
    if (size < 0 || size > longest_file) {
        fault.what = path + " is no regular file, or has more than 1 GiB";
        fault.hint = "Give a file, and split a longer one";
        return fault;
    }
    std::string text(static_cast<std::size_t>(size), '\0');
    in.seekg(0);
    if (in.read(text.data(), size)) return text;
    fault.what = "cannot read " + path;
    return fault;
}

int replay_recipe(const ReplayOptions& options, const RunView& view) {
    Complaints complaints;
    const auto recipe = load_recipe(options.recipe_path, complaints);
    if (recipe) {
        std::vector<std::string_view> names;
        for (const StrategyEntry& entry : strategies()) names.push_back(entry.name);
        check_recipe_for_replay(*recipe, view.board, names, complaints);
    }
    if (complaints.any()) return report(fault_of(complaints), options.json);
    const ReplayView replayed{
        view, *recipe,
        replay_with(view.board, *recipe, view.manifest.lanes, view.manifest.seed, view.state)};
    if (options.json) {
        print_json(replay_json(replayed));
    } else {
        print(replay_account(replayed));
    }
    for (const ReplayedLane& lane : replayed.lanes) {
        if (!lane.decision) return exit_bad_data;
    }
    return exit_ok;
}

int replay_strict(const ReplayOptions& options, const RunRow& row, const Database& database) {
    const StrictReport outcome = replay_strictly(row.manifest, all_events(database, row.id));
    if (options.json) {
        print_json(strict_json(outcome));
    } else {
        print(strict_account(outcome));
    }
    return outcome.difference ? exit_bad_data : exit_ok;
}

Fault cut_short(const RunRow& row) {
    Fault fault;
    fault.cause = Cause::bad_data;
    fault.what = "the import of run " + row.id + " was cut short: some of its rows are missing";
    fault.hint = "Import " + row.manifest.imported->readings_path + " again";
    return fault;
}

int replay(const ReplayOptions& options) {
    const Database database(path_or_default(options.store_path), Database::Mode::read_only);
    const RunRow row = database.find_run(options.run);
    if (options.strict) return replay_strict(options, row, database);
    const RunView view = view_of(row, database);
    if (row.manifest.imported && !view.state.ended) return report(cut_short(row), options.json);
    return replay_recipe(options, view);
}

struct ImportJob {
    ColumnMap columns;
    BoardFile board;
    SourceFile board_file;  // empty where the column map describes the board
    Import from;
    ImportedRows rows;
};

Result<ImportJob> prepare(const ImportOptions& options) {
    ImportJob job;
    Complaints complaints;
    auto columns = load_columns(options.columns_path, complaints);
    std::optional<BoardFile> board;
    if (!options.board_path.empty()) board = load_board_file(options.board_path, complaints);
    if (complaints.any()) return fault_of(complaints);
    job.columns = std::move(*columns);
    if (!board && !job.columns.board) {
        Fault fault;
        fault.cause = Cause::bad_config;
        fault.what = "the column map " + options.columns_path +
                     " describes no board: limits of the codes and noise are not known";
        fault.hint = "Add /board to it, or name the board's file with --board";
        return fault;
    }
    if (board) job.board_file = {board->path, sha256_hex(board->source), board->source};
    job.board = board ? std::move(*board) : *job.columns.board;
    auto text = text_of_file(options.readings_path);
    if (!text) return text.error();
    auto rows = import_rows(*text, job.columns, job.board);
    if (!rows) return rows.error();
    job.rows = std::move(*rows);
    job.from.columns = {job.columns.path, sha256_hex(job.columns.source), job.columns.source};
    job.from.readings_path = options.readings_path;
    job.from.readings_sha256 = sha256_hex(*text);
    job.from.row_count = job.rows.row_count;
    job.from.rejected_count = job.rows.rejected.size();
    return job;
}

// The ids of the runs that were made.
Result<std::vector<RunId>> store_runs(const ImportOptions& options, ImportJob& job) {
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    auto store = Store::open(path_or_default(options.store_path), time);
    if (!store) return store.error();
    std::vector<RunId> ids;
    for (ImportedRun& run : job.rows.runs) {
        Manifest manifest = manifest_of(run, job.columns, job.board, job.board_file, job.from);
        ids.push_back(manifest.run);
        auto stored = run_until_done(
            time, store_run(store->get(), std::move(manifest), std::move(run.events)));
        if (!stored) return stored.error();
    }
    return ids;
}

int import(const ImportOptions& options) {
    auto job = prepare(options);
    if (!job) return report(job.error(), options.json);
    std::vector<RunId> ids;
    if (!options.dry_run && !job->rows.runs.empty()) {
        auto stored = store_runs(options, *job);
        if (!stored) return report(stored.error(), options.json);
        ids = std::move(*stored);
    }
    const ImportView view{options.readings_path, job->columns, job->rows, std::move(ids)};
    if (const std::string rejected = rejected_text(view); !rejected.empty()) print_error(rejected);
    if (options.json) {
        print_json(import_json(view));
    } else {
        print(import_account(view));
    }
    const bool all = job->rows.rejected.empty() && !job->rows.runs.empty();
    if (job->rows.runs.empty())
        print_error("lanewright: no row could be taken; nothing was stored");
    return all ? exit_ok : exit_bad_data;
}

}  // namespace

int run_replay(const ReplayOptions& options) {
    if (options.strict == !options.recipe_path.empty()) {
        return report_usage("replay needs either --strict or --recipe FILE", options.json);
    }
    try {
        return replay(options);
    } catch (const StoreError& error) {
        return report(error.fault(), options.json);
    }
}

int run_import(const ImportOptions& options) {
    try {
        return import(options);
    } catch (const StoreError& error) {
        return report(error.fault(), options.json);
    }
}

}  // namespace lanewright
