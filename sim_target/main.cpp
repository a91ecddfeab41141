// lanewright-target: a board that is not there. `serve` answers on its wires, `truth` tells what no
// wire does: the noise-free margins.
// Exit codes are those of sysexits: 64 usage, 65 a data file that cannot be understood, 70 a fault
// of this program, 74 output, 78 a target file that is wrong or cannot be read.

#include <CLI/CLI.hpp>
#include <algorithm>
#include <array>
#include <filesystem>
#include <iostream>
#include <nlohmann/json.hpp>
#include <optional>
#include <string>
#include <string_view>
#include <thread>
#include <vector>

#include "sim_target/board/board_side.hpp"
#include "sim_target/board/serve.hpp"
#include "sim_target/target_file.hpp"
#include "sim_target/truth_cache.hpp"
#include "sim_target/truth_report.hpp"

namespace {

using namespace lanewright;
using namespace lanewright::sim;

constexpr int exit_usage = 64;
constexpr int exit_data = 65;
constexpr int exit_fault = 70;
constexpr int exit_output = 74;
constexpr int exit_config = 78;

struct TruthOptions {
    std::string target_path;
    int lane = 0;
    std::string codes, required;
    bool best = false, all = false, json = false, csv = false;
    int board = -1;
    std::string cache;
    bool no_cache = false;
};

int failed(const TruthOptions& options, int code, const std::string& what) {
    std::cerr << "lanewright-target: " << what << (what.ends_with('\n') ? "" : "\n");
    if (options.json)
        std::cout << nlohmann::json{{"format", "lanewright-truth/1"}, {"error", what}}.dump(
                         -1, ' ', false, nlohmann::json::error_handler_t::replace)
                  << '\n';
    return code;
}

int run_truth(const TruthOptions& options) {
    Complaints complaints;
    const std::string folder = std::filesystem::path(options.target_path).parent_path().string();
    auto target = load_target(options.target_path, complaints, [&](const Object& top) {
        decode_board_side(top, folder.empty() ? "." : folder);
    });
    if (!target) return failed(options, exit_config, complaints.text());
    std::string problem = choose_board(*target, options.board);
    if (!problem.empty()) return failed(options, exit_usage, "--population-board: " + problem);
    if (options.lane < 0 || static_cast<std::size_t>(options.lane) >= target->lanes.size())
        return failed(options, exit_usage,
                      "--lane " + std::to_string(options.lane) + ": this target has lanes 0 to " +
                          std::to_string(target->lanes.size() - 1));
    std::optional<Required> required = target->required;
    if (!options.required.empty())
        required = required_from_text(options.required, target->required, problem);
    if (!required) return failed(options, exit_usage, "--required: " + problem);

    const Oracle oracle(*target, options.lane);
    if (!oracle.channel_note().empty()) std::cerr << oracle.channel_note() << '\n';
    const unsigned threads = std::clamp(std::thread::hardware_concurrency(), 1U, 64U);
    std::vector<CodesScore> results;
    if (options.all) {
        results = all_codes(oracle, *required, threads);
    } else if (options.best) {
        const std::string kept_in = options.no_cache        ? std::string()
                                    : options.cache.empty() ? default_truth_folder()
                                                            : options.cache;
        results.push_back(kept_best_codes(oracle, *target, *required, threads, kept_in));
    } else {
        const auto codes = codes_from_text(options.codes, oracle.code_counts(), problem);
        if (!codes) return failed(options, exit_usage, "--codes: " + problem);
        const Margins margins = oracle.margins(*codes, required->error_ratio);
        results.push_back({*codes, margins, score(margins, *required)});
    }
    const TruthFormat format = options.json  ? TruthFormat::json
                               : options.csv ? TruthFormat::csv
                                             : TruthFormat::text;
    write_truth(std::cout, format,
                {target->name, options.lane,
                 options.all    ? "all"
                 : options.best ? "best"
                                : "codes",
                 oracle.nyquist_loss_db(), *required},
                results);
    std::cout.flush();
    return std::cout ? 0 : failed(options, exit_output, "the result could not be written");
}

// CLI11 would only say that something is left over; a misspelt verb deserves its correction.
std::optional<std::string> unknown_verb(int count, char** words) {
    const std::vector<std::string_view> verbs = {"serve", "truth"};
    if (count < 2 || std::string_view(words[1]).starts_with('-')) return std::nullopt;
    const std::string word = words[1];
    if (std::find(verbs.begin(), verbs.end(), word) != verbs.end()) return std::nullopt;
    const std::string nearest = nearest_word(word, verbs);
    return "unknown verb '" + word + "'" +
           (nearest.empty() ? std::string("; the verbs are serve and truth")
                            : "; did you mean '" + nearest + "'?");
}

void add_serve(CLI::App& app, ServeOptions& options) {
    CLI::App* serve = app.add_subcommand("serve", "answer as the board on TCP and serial lines");
    serve->add_option("--target", options.target_path, "the target file")->required();
    serve->add_option("--tcp", options.tcp, "HOST:PORT to listen on, port 0 for any; repeatable");
    serve
        ->add_option("--population-board", options.population_board,
                     "which board of the target's population, from 0 (the default)")
        ->check(CLI::NonNegativeNumber);
    serve->add_option("--pty", options.pty, "path of a link to a new pseudo-terminal; repeatable");
}

void add_truth(CLI::App& app, TruthOptions& options) {
    CLI::App* truth = app.add_subcommand("truth", "tell the noise-free margins of a lane");
    truth->add_option("--target", options.target_path, "the target file")->required();
    truth->add_option("--lane", options.lane, "lane, from 0")->required();
    CLI::Option_group* which = truth->add_option_group("which codes");
    which->add_option("--codes", options.codes, "as in r1=9,r2=15,c1=15,c2=0");
    which->add_flag("--best", options.best, "the best codes");
    which->add_flag("--all", options.all, "every combination");
    which->require_option(1);
    truth->add_option("--required", options.required,
                      "height_mv=H,width_ui=W,error_ratio=E; default: the target file's");
    truth
        ->add_option("--population-board", options.board,
                     "which board of the target's population, from 0 (the default)")
        ->check(CLI::NonNegativeNumber);
    CLI::Option* cache = truth->add_option(
        "--cache", options.cache, "folder that keeps best codes; default: the user's cache folder");
    truth->add_flag("--no-cache", options.no_cache, "neither use nor keep best codes")
        ->excludes(cache);
    CLI::Option* json = truth->add_flag("--json", options.json, "one JSON object on stdout");
    truth->add_flag("--csv", options.csv, "comma-separated values on stdout")->excludes(json);
}

int run(int count, char** words) {
    CLI::App app{"lanewright-target: a simulated board for lanewright"};
    app.require_subcommand(1);
    ServeOptions serve;
    TruthOptions truth;
    add_serve(app, serve);
    add_truth(app, truth);
    if (const auto complaint = unknown_verb(count, words)) {
        std::cerr << "lanewright-target: " << *complaint << '\n';
        return exit_usage;
    }
    try {
        app.parse(count, words);
    } catch (const CLI::ParseError& error) {
        return app.exit(error, std::cout, std::cerr) == 0 ? 0 : exit_usage;
    }
    try {
        return app.got_subcommand("serve") ? run_serve(serve) : run_truth(truth);
    } catch (const BadData& error) {
        return failed(truth, exit_data, error.what());
    } catch (const std::exception& error) {
        return failed(truth, exit_fault, error.what());
    }
}

}  // namespace

int main(int count, char** words) {
    return run(count, words);
}
