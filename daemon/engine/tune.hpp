#pragma once
// Purpose:   the whole job on one opened board: identify, mend what an earlier run left, resume or
//            begin a run, run it.
// Ownership: refers to the bench; values otherwise.
// Threads:   the io thread.

#include <map>
#include <string>
#include <vector>

#include "daemon/engine/endpoint.hpp"
#include "daemon/engine/engine.hpp"
#include "daemon/store/store.hpp"

namespace lanewright {

// A run's manifest with all that the moment, the machine and the program give: id, time, versions,
// host and process.
Manifest manifest_begun_now();

struct TuneRequest {
    BoardFile board;
    Recipe recipe;
    std::vector<std::uint16_t> lanes;  // ascending
    std::string link;                  // as text, for the manifest
    std::uint64_t seed = 1;
    std::map<std::string, std::string> tags;
    std::string condition;
    bool anew = false;            // never resume
    bool preflight = true;        // look whether the bench is fit to measure on, first
    bool only_preflight = false;  // measure all of the preflight anew, and search nothing
};

struct TuneOutcome {
    RunId run;
    RunEnded ended;
};

// On a fault the run, if it began, is in the store with what it came to; `began` tells its id.
Task<TuneOutcome> tune_board(TuneRequest request, Bench bench, Store* store, Endpoint* endpoint,
                             RunId* began);

// Takes the lock of the board that is at hand and writes what an earlier run left to restore on it,
// over this link or another; nothing to do is success.
Task<void> mend_board(Identity present, Bench bench, Store* store, Endpoint* endpoint);

}  // namespace lanewright
