#pragma once
// Purpose:   what replays and imports found, as JSON for programs and as text for people.
// Ownership: values only.
// Threads:   no shared state.

#include <nlohmann/json_fwd.hpp>
#include <string>
#include <vector>

#include "daemon/replay/counterfactual.hpp"
#include "daemon/replay/import.hpp"
#include "daemon/replay/strict.hpp"
#include "daemon/views/lane_result.hpp"

namespace lanewright {

// A recipe's decisions on the readings of a run.
struct ReplayView {
    const RunView& run;
    const Recipe& recipe;  // the other one
    std::vector<ReplayedLane> lanes;
};

nlohmann::ordered_json replay_json(const ReplayView& view);
std::string replay_account(const ReplayView& view);  // at most 80 columns

nlohmann::ordered_json strict_json(const StrictReport& report);
std::string strict_account(const StrictReport& report);

// What an import made of a file. `ids`: of the runs, in their order; empty where nothing was
// stored.
struct ImportView {
    std::string readings_path;
    const ColumnMap& columns;
    const ImportedRows& rows;
    std::vector<RunId> ids;
};

nlohmann::ordered_json import_json(const ImportView& view);
std::string import_account(const ImportView& view);
// One line a row: file, line, column, reason.
std::string rejected_text(const ImportView& view);

// "error ratio, pattern": what nobody can say of an imported run; empty: everything is known.
std::string unknown_of(const Manifest& manifest, const RunState& state);

}  // namespace lanewright
