#pragma once
// Purpose:   the best codes of a lane, kept on disk: finding them takes seconds of CPU time.
// Ownership: one small file a question; whoever deletes the folder loses nothing but time.
// Threads:   several processes may use one folder at once: files are replaced whole.
//
// A file is believed only if its question is the same in full (version of the physics, text of the
// target file, contents of its channel file, board of a population, lane, required margin) and its
// codes, evaluated anew, have the score it states. Anything else counts as not there.

#include <string>

#include "sim_target/physics/truth.hpp"

namespace lanewright::sim {

// $XDG_CACHE_HOME/lanewright/truth, else $HOME/.cache/lanewright/truth; empty without either.
std::string default_truth_folder();

// What the answer depends on; the target must be as it was read from its file.
std::string truth_question(const TargetFile& target, int lane, const Required& required);

// As best_codes(), from `folder` where it is known there, kept there otherwise; an empty folder or
// one that cannot be written keeps nothing.
CodesScore kept_best_codes(const Oracle& oracle, const TargetFile& target, const Required& required,
                           unsigned threads, const std::string& folder);

}  // namespace lanewright::sim
