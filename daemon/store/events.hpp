#pragma once
// Purpose:   what a run is made of: the events that the store keeps, in order. Everything else
//            (state, results, resume) is a fold over them.
// Ownership: values only.
// Threads:   no shared state.

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <variant>
#include <vector>

#include "adapt/search/procedure.hpp"
#include "adapt/values/values.hpp"
#include "drivers/board/lane_reader.hpp"

namespace lanewright {

using RunId = std::string;      // unique across benches: time and 32 random bits
using EventSeq = std::int64_t;  // row number in its store

// Which part of a lane's job a reading belongs to. Readings of the last two are no business of the
// strategy's: neither shown to it nor charged to its budget.
enum class Stage : std::uint8_t { search, compare, preflight, reference };

// What the chip's codes were set to for good, and why.
enum class Settlement : std::uint8_t {
    decided,   // the decided codes, left in place
    restored,  // the codes found before the run
    given_up   // something else writes there: left as it is, and not written to any more
};

enum class LaneOutcome : std::uint8_t { tuned, unchanged, failed };

// Why a run came to its end.
enum class Ending : std::uint8_t { complete, stopped, wall_limit, fault };

struct Identified {
    Identity identity;
};

// Everything a run may write on the lane, as found; stored before the first write.
struct LaneSaved {
    SavedLane saved;
};

// These codes go out next, for this reading; stored before the first byte of them.
struct Intent {
    Lane lane{};
    std::uint32_t ordinal = 0, attempt = 0;
    Stage stage = Stage::search;
    Request request;
};

struct ReadingTaken {
    Lane lane{};
    std::uint32_t ordinal = 0, attempt = 0;
    Reading reading;
    std::vector<WireOperation> wire;
};

// A reading that doesn't count (reset, lost link); never handed to a strategy, never charged.
struct ReadingVoid {
    Lane lane{};
    std::uint32_t ordinal = 0, attempt = 0;
    std::string cause;
    std::string changed_register;  // where the codes changed without us: which one
};

struct LaneDecided {
    Lane lane{};
    Decision decision;
};

// The lane's codes are where they are to stay; read back.
struct LaneSettled {
    Lane lane{};
    Settlement settlement = Settlement::restored;
    Codes codes;
};

// The lane's job is over.
struct LaneFinished {
    Lane lane{};
    LaneOutcome outcome = LaneOutcome::failed;
    std::string reason;
};

struct RunResumed {
    std::int64_t pid = 0;
    std::string text;
};

// What the wire went through since the run, or its resumption, began.
struct LinkCounts {
    std::uint64_t frames = 0, bad_frames = 0, retries = 0, reconnects = 0, resets = 0;
};

struct RunEnded {
    Ending ending = Ending::complete;
    std::string reason;
    LinkCounts link;
    double wall_s = 0;
};

// Codes written on somebody's word after the run (apply), or at the next contact after a crash.
struct CodesWritten {
    Lane lane{};
    Codes codes;
    std::string why;
};

// What came of one item of the preflight.
enum class ItemResult : std::uint8_t {
    passed,
    failed,    // the run stops
    noted,     // the run goes on otherwise: `found` says how
    not_shown  // could not be found out here; `found` says why
};

struct PreflightItem {
    std::optional<Lane> lane;  // empty: of the whole board
    std::string name;          // reference_clock, repeatability, ...
    ItemResult result = ItemResult::not_shown;
    std::string found, expected, advice;   // sentences for people; advice: what to do
    std::map<std::string, double> values;  // by name with unit: height_sigma_mv, ...
    std::optional<Codes> codes;            // at which it was measured
    std::string settings;                  // under which it was: error ratio and dwell
    RunId from;                            // the run that measured it; empty: this one
    bool operator==(const PreflightItem&) const = default;
};

// The lane is to measure these items now, each by a procedure of its own, from their beginning.
struct PreflightBegun {
    Lane lane{};
    std::vector<std::string> items;
};

// The noise that the lane's strategy and its verdict are told, as measured by the preflight.
struct NoiseChosen {
    Lane lane{};
    MonitorNoise noise;
    RunId from;  // the run that measured it; empty: this one
};

// The board has reset behind our back: the lane's codes are gone, and its reference is to be read
// again before anything else counts.
struct LaneReset {
    Lane lane{};
};

using Event = std::variant<Identified, LaneSaved, Intent, ReadingTaken, ReadingVoid, LaneDecided,
                           LaneSettled, LaneFinished, RunResumed, RunEnded, CodesWritten,
                           PreflightItem, PreflightBegun, NoiseChosen, LaneReset>;

struct StoredEvent {
    EventSeq seq = 0;
    RunId run;
    std::int64_t at_ns = 0;  // UTC since the epoch
    Event event;
};

// The name under which a kind of event is stored.
const char* kind_of(const Event& event);
std::optional<Lane> lane_of(const Event& event);

// The event's body as JSON text. A reading's derived margins and raw record have columns of their
// own, so its body is empty. decode throws StoreError on a body that this version cannot read.
std::string encode_body(const Event& event);
Event decode_body(const std::string& kind, const std::string& body);

const char* name_of(Stage stage);
const char* name_of(Settlement settlement);
const char* name_of(LaneOutcome outcome);
const char* name_of(Ending ending);
const char* name_of(ItemResult result);
const char* name_of(Status status);
const char* name_of(ErrorDefinition definition);
const char* name_of(Basis basis);
Status status_from(const std::string& word);  // these three throw StoreError on an unknown word
ErrorDefinition error_definition_from(const std::string& word);
Basis basis_from(const std::string& word);

}  // namespace lanewright
