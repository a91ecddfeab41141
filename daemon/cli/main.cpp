// The words of the command line, and nothing else: each verb is one function in commands.hpp.

#include <CLI/CLI.hpp>
#include <algorithm>
#include <exception>
#include <string>
#include <string_view>
#include <vector>

#include "daemon/cli/commands.hpp"
#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/log.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/engine/version.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/config/json_reader.hpp"

namespace {

using namespace lanewright;

constexpr const char* link_help = "tcp:HOST:PORT or serial:PATH; default: the board file's";
constexpr const char* store_help = "default: $XDG_STATE_HOME/lanewright/store.db";
constexpr const char* run_help = "a run's id, the beginning of one, or \"latest\"";

// Empty where the text names a link.
std::string why_no_link(const std::string& text) {
    std::string why;
    return parse_link(text, LinkDescription{}, why) ? std::string() : why;
}

void add_check(CLI::App& app, CheckOptions& options) {
    CLI::App* verb = app.add_subcommand("check", "reach a board and try its link; measure it");
    verb->add_option("--board", options.board_path, "board file")->required();
    verb->add_option("--link", options.link, link_help)->check(why_no_link);
    verb->add_flag("--json", options.json, "one JSON object on stdout");
    CLI::Option* measure = verb->add_flag("--measure", options.measure,
                                          "is it fit to be searched? Codes are put back");
    verb->add_option("--recipe", options.recipe_path, "read as this recipe does")->needs(measure);
    verb->add_option("--lanes", options.lanes, "such as 0,2-5; default: all")->needs(measure);
    verb->add_option("--store", options.store_path, store_help)->needs(measure);
    verb->add_option("--tag", options.tags, "KEY=VALUE, kept with the run; may be repeated")
        ->allow_extra_args(false)
        ->needs(measure);
    verb->add_option("--condition", options.condition, "the corner at hand, such as 85C-low")
        ->needs(measure);
}

void add_tune(CLI::App& app, TuneOptions& options) {
    CLI::App* verb =
        app.add_subcommand("tune", "find, verify and set codes; resumes an interrupted run");
    verb->add_option("--board", options.board_path, "board file")->required();
    verb->add_option("--recipe", options.recipe_path, "recipe file")->required();
    verb->add_option("--link", options.link, link_help)->check(why_no_link);
    verb->add_option("--lanes", options.lanes, "such as 0,2-5; default: the recipe's");
    verb->add_option("--store", options.store_path, store_help);
    verb->add_option("--seed", options.seed, "default: the recipe's, else 1");
    verb->add_option("--tag", options.tags, "KEY=VALUE, kept with the run; may be repeated")
        ->allow_extra_args(false);
    verb->add_option("--condition", options.condition, "the corner at hand, such as 85C-low");
    verb->add_option("--threads", options.threads, "threads that strategies compute on")
        ->check(CLI::Range(1u, 64u));
    verb->add_flag("--new", options.anew, "a new run, even where one could be resumed");
    verb->add_flag("--dry-run", options.dry_run, "show what would be written; writes nothing");
    verb->add_flag("--json", options.json, "one JSON object on stdout");
}

void add_store_verbs(CLI::App& app, StoreOptions& runs, StoreOptions& show,
                     ExportOptions& exported) {
    CLI::App* list = app.add_subcommand("runs", "list the runs of a store");
    list->add_option("--store", runs.store_path, store_help);
    list->add_flag("--json", runs.json, "one JSON array on stdout");

    CLI::App* one = app.add_subcommand("show", "what a run did and found");
    one->add_option("--store", show.store_path, store_help);
    one->add_option("run", show.run, run_help)->required();
    one->add_flag("--json", show.json, "one JSON object on stdout");

    CLI::App* out = app.add_subcommand("export", "a run for other programs");
    out->add_option("--store", exported.store_path, store_help);
    out->add_option("run", exported.run, run_help)->required();
    out->add_option("--as", exported.format, "the result, a row a reading, or the register writes")
        ->required()
        ->check(CLI::IsMember({"json", "csv", "writes"}));
    out->add_option("--out", exported.out_path, "file to write; default: stdout");
}

void add_apply(CLI::App& app, ApplyOptions& options) {
    CLI::App* verb =
        app.add_subcommand("apply", "write a run's codes to its board and read them back");
    verb->add_option("--store", options.store_path, store_help);
    verb->add_option("--board", options.board_path, "board file")->required();
    verb->add_option("--link", options.link, link_help)->check(why_no_link);
    verb->add_option("run", options.run, run_help)->required();
    verb->add_flag("--former", options.former, "the codes found before the run instead");
    verb->add_flag("--json", options.json, "one JSON object on stdout");
}

void add_replay(CLI::App& app, ReplayOptions& options) {
    CLI::App* verb =
        app.add_subcommand("replay", "decide a run anew from its log, or by another recipe");
    verb->add_option("--store", options.store_path, store_help);
    verb->add_option("run", options.run, run_help)->required();
    verb->add_flag("--strict", options.strict,
                   "the recorded answers to the same program; ends at the first difference");
    verb->add_option("--recipe", options.recipe_path,
                     "what this recipe would have decided on the logged readings");
    verb->add_flag("--json", options.json, "one JSON object on stdout");
}

void add_import(CLI::App& app, ImportOptions& options) {
    CLI::App* verb =
        app.add_subcommand("import", "margins logged by other means, into a store as runs");
    verb->add_option("--readings", options.readings_path, "the margins, comma-separated values")
        ->required();
    verb->add_option("--columns", options.columns_path, "column map: what each column means")
        ->required();
    verb->add_option("--board", options.board_path,
                     "board file with limits, noise and costs; default: the map's own");
    verb->add_option("--store", options.store_path, store_help);
    verb->add_flag("--dry-run", options.dry_run, "read and check all rows; stores nothing");
    verb->add_flag("--json", options.json, "one JSON object on stdout");
}

std::vector<std::string> verb_names(const CLI::App& app) {
    std::vector<std::string> names;
    for (const CLI::App* verb : app.get_subcommands({})) names.push_back(verb->get_name());
    return names;
}

// Also where CLI11 did not get as far as the option.
bool wants_json(int count, char** words) {
    return std::any_of(words, words + count,
                       [](const char* word) { return std::string_view(word) == "--json"; });
}

// CLI11 says of an unknown verb only that one is required.
int refuse_usage(const CLI::App& app, const CLI::ParseError& error, int count, char** words) {
    const std::vector<std::string> names = verb_names(app);
    const std::string first = count > 1 ? words[1] : "";
    const bool json = wants_json(count, words);
    const bool known = std::find(names.begin(), names.end(), first) != names.end();
    if (first.empty() || known || first.front() == '-') {
        report_usage(error.what(), json);
        print_error("Try: lanewright " + (known ? first + " " : std::string()) + "--help");
        return exit_usage;
    }
    const std::string near =
        nearest_word(first, std::vector<std::string_view>(names.begin(), names.end()));
    report_usage("there is no verb \"" + first + "\"" +
                     (near.empty() ? "" : "; did you mean \"" + near + "\"?"),
                 json);
    print_error("Try: lanewright --help");
    return exit_usage;
}

int run(int count, char** words) {
    CLI::App app{"Lanewright finds, proves and keeps the equalizer codes of receiver lanes.",
                 "lanewright"};
    app.set_version_flag("--version", "lanewright " + program_version() + " (" + git_hash() + ")");
    app.require_subcommand(1);
    app.get_formatter()->column_width(24);  // texts have 56 of 80 columns
    CheckOptions check;
    TuneOptions tune;
    StoreOptions runs, show;
    ExportOptions exported;
    ApplyOptions apply;
    ReplayOptions replay;
    ImportOptions import;
    add_check(app, check);
    add_tune(app, tune);
    add_store_verbs(app, runs, show, exported);
    add_apply(app, apply);
    add_replay(app, replay);
    add_import(app, import);
    try {
        app.parse(count, words);
    } catch (const CLI::Success& answered) {  // --help, --version
        return app.exit(answered);
    } catch (const CLI::ParseError& error) {
        return refuse_usage(app, error, count, words);
    }
    if (app.got_subcommand("runs")) return run_runs(runs);
    if (app.got_subcommand("show")) return run_show(show);
    if (app.got_subcommand("export")) return run_export(exported);
    if (app.got_subcommand("replay")) return run_replay(replay);
    if (app.got_subcommand("import")) return run_import(import);
    open_log(count, words);  // of the verbs that talk to a board
    if (app.got_subcommand("check")) return run_check(check);
    if (app.got_subcommand("tune")) return run_tune(tune);
    return run_apply(apply);
}

}  // namespace

int main(int count, char** words) {
    lanewright::secure_standard_streams();
    try {
        return run(count, words);
    } catch (const lanewright::OutputError& error) {
        lanewright::print_error(std::string("lanewright: ") + error.what());
        return lanewright::exit_io;
    } catch (const std::exception& error) {
        lanewright::Fault fault;
        fault.cause = lanewright::Cause::internal;
        fault.what = std::string("unexpected: ") + error.what() + ". Please report this";
        return lanewright::report(fault, wants_json(count, words));
    }
}
