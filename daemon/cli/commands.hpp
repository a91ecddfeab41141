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
};
int run_check(const CheckOptions& options);

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

}  // namespace lanewright
