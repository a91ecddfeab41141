#pragma once
// Purpose:   runs one run on one board: save, preflight, measure, conclude, apply, compare afresh,
//            settle.
//            It knows nothing of what a procedure measures for.
// Ownership: refers to everything in Bench, which must outlive the run.
// Threads:   the io thread; strategies compute on the workers.
// Errors:    the run's own fault, after every lane that can be was put where it belongs. What could
//            not be stands in the restore note, and the fault says so.

#include <functional>
#include <string>
#include <vector>

#include "daemon/engine/lane_setup.hpp"
#include "daemon/engine/restore_note.hpp"
#include "daemon/engine/run_state.hpp"
#include "daemon/store/journal.hpp"
#include "daemon/store/manifest.hpp"
#include "drivers/board/lane_reader.hpp"
#include "drivers/io/signal.hpp"
#include "drivers/io/time_source.hpp"
#include "drivers/io/workers.hpp"

namespace lanewright {

struct Bench {
    LaneReader& reader;
    Journal& journal;
    Workers& workers;
    TimeSource& time;
    Stop stop;  // polled at safe points: between two readings of a lane
    std::string note_path;
    std::vector<Observer*> observers;
    std::function<LinkCounts()> link_counts;      // since the session began
    std::function<void(const std::string&)> say;  // what a person should know at once
};

struct RunPlan {
    Manifest manifest;
    BoardFile board;
    Recipe recipe;
    RestoreNote note;       // endpoint, board, identity, run and store filled in; no lanes yet
    bool preflight = true;  // is the bench fit to measure on? Before anything is searched
    bool only_preflight = false;       // all of it, and no search
    std::vector<PreflightItem> known;  // measured by earlier runs on this board and condition
};

// Runs, or goes on with, the run whose events so far are `history`. Returns how it ended; a Fault
// only where even that could not be stored.
Task<RunEnded> run_board(RunPlan plan, std::vector<StoredEvent> history, Bench bench);

// Writes what the note says on every lane it names, reads it back, tells the journal (if the run
// is known there) and removes the lane from the note. Cause::wrong_board where the board now
// present is not the note's.
Task<void> settle_note(RestoreNote note, Identity present, Bench bench, bool in_journal,
                       std::string why);

}  // namespace lanewright
