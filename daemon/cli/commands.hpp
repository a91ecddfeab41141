#pragma once
// Purpose:   the verbs of the command line, one function each; main.cpp only reads the words.
// Ownership: options are values.
// Threads:   called once, on the main thread; returns the process's exit code.
// Errors:    printed on stderr, or as one object on stdout with --json; see exit_codes.hpp.

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

namespace lanewright {

struct CheckOptions {
    std::string board_path, link;
    bool json = false;
    // With --measure only:
    bool measure = false;
    std::string recipe_path, store_path, condition;
    std::optional<std::string> lanes;
    std::vector<std::string> tags;
};
int run_check(const CheckOptions& options);
int run_measure(const CheckOptions& options);  // check --measure

struct TuneOptions {
    std::string board_path, recipe_path, link, store_path, condition;
    std::optional<std::string> lanes, seed;  // as typed
    std::vector<std::string> tags;
    unsigned threads = 1;  // workers that strategies compute on
    bool anew = false, dry_run = false, json = false;
};
int run_tune(const TuneOptions& options);

struct StoreOptions {
    std::string store_path, run;
    bool json = false;
};
int run_runs(const StoreOptions& options);
int run_show(const StoreOptions& options);

struct ExportOptions {
    std::string store_path, run, format, out_path;
};
int run_export(const ExportOptions& options);

struct ApplyOptions {
    std::string store_path, board_path, link, run;
    bool former = false, json = false;
};
int run_apply(const ApplyOptions& options);

struct ReplayOptions {
    std::string store_path, run, recipe_path;
    bool strict = false, json = false;
};
int run_replay(const ReplayOptions& options);

struct ImportOptions {
    std::string store_path, readings_path, columns_path, board_path;
    bool dry_run = false, json = false;
};
int run_import(const ImportOptions& options);

}  // namespace lanewright
