#pragma once
// Purpose:   strict replay: the recorded answers given to the same program, lane by lane, event by
//            event and register operation by register operation. The first thing that is not as
//            recorded ends it.
// Ownership: values only.
// Threads:   one caller at a time.
// Errors:    BadStoreData where the run cannot be replayed at all (imported, unreadable files).

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "daemon/store/events.hpp"
#include "daemon/store/manifest.hpp"

namespace lanewright {

// The first difference, with everything that finds it in the store.
struct Difference {
    RunId run;
    Lane lane{};
    EventSeq seq = 0;
    std::string event;  // kind of event
    std::optional<std::uint32_t> ordinal;
    std::optional<std::size_t> operation;  // of the reading's wire record, from 0
    std::string reg;                       // register.field of that operation
    std::string what;                      // one sentence
    std::string expected, found;           // by the program; in the store
};

struct StrictLane {
    std::uint16_t lane = 0;
    std::size_t events = 0, readings = 0, operations = 0, void_readings = 0;
    bool finished = false;
};

struct StrictReport {
    RunId run;
    std::vector<StrictLane> lanes;   // as far as it came
    std::vector<std::string> notes;  // another version, another CPU, a run that did not end
    // What could be altered in the store and not be noticed here, as the rest does not follow from
    // it: "the seed (...)".
    std::vector<std::string> not_checked;
    std::optional<Difference> difference;
};

StrictReport replay_strictly(const Manifest& manifest, const std::vector<StoredEvent>& events);

}  // namespace lanewright
