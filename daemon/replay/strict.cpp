#include "daemon/replay/strict.hpp"

#include <boost/asio/io_context.hpp>
#include <iterator>
#include <map>
#include <memory>
#include <nlohmann/json.hpp>
#include <utility>
#include <variant>

#include "daemon/engine/lane_setup.hpp"
#include "daemon/engine/preflight.hpp"
#include "daemon/engine/run_state.hpp"
#include "daemon/engine/version.hpp"
#include "daemon/replay/reading_check.hpp"
#include "daemon/replay/run_files.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/store/value_json.hpp"

namespace lanewright {

namespace {

const char* name_of(const Action& action) {
    constexpr const char* names[] = {"save the lane",
                                     "take a reading",
                                     "decide",
                                     "settle the codes",
                                     "finish",
                                     "nothing",
                                     "conclude an item of the preflight",
                                     "stop the run"};
    static_assert(std::size(names) == std::variant_size_v<Action>);
    return action.index() < std::size(names) ? names[action.index()] : "something else";
}

std::string text_of(const Request& request) {
    nlohmann::json value = to_json_value(request);
    value.erase("why");  // for people, and no part of what was done
    return value.dump();
}

std::string text_of(const Decision& decision) {
    return to_json_value(decision).dump();
}

std::string text_of(const Codes& codes) {
    return to_json_value(codes).dump();
}

// One lane's events held against the machine that would have made them.
class LaneReplay {
  public:
    LaneReplay(LaneSetup setup, const BoardFile& board, ReadingCheck& readings, bool leave)
        : lane_(setup.problem.lane),
          machine_(std::move(setup)),
          board_(board),
          readings_(readings),
          leave_(leave) {}

    // Empty: the event is what the program would have done, or what happened to it.
    std::optional<Difference> take(const StoredEvent& stored);

    // After the last event.
    std::optional<Difference> end(bool complete);

    StrictLane tally;

  private:
    using Found = std::optional<Difference>;

    Found check(const LaneSaved& event);
    Found check(const Intent& event);
    Found check(const ReadingTaken& event);
    Found check(const ReadingVoid& event);
    Found check(const LaneDecided& event);
    Found check(const LaneSettled& event);
    Found check(const LaneFinished& event);
    Found check(const PreflightItem& event);
    template <class Other>
    Found check(const Other&) {
        return std::nullopt;  // what happened to the lane from outside
    }
    Difference differs(std::string what, std::string expected, std::string found) const;
    std::optional<ReadingDifference> check_record(const ReadingTaken& event);

    Lane lane_;
    LaneMachine machine_;
    const BoardFile& board_;
    ReadingCheck& readings_;
    bool leave_;
    std::optional<SavedLane> saved_;
    std::optional<Codes> standing_;  // on the chip, as far as the events tell
    std::optional<Intent> intent_;   // under way
    std::optional<Decision> decision_;
};

Difference LaneReplay::differs(std::string what, std::string expected, std::string found) const {
    Difference out;
    out.lane = lane_;
    if (intent_) out.ordinal = intent_->ordinal;
    out.what = std::move(what);
    out.expected = std::move(expected);
    out.found = std::move(found);
    return out;
}

LaneReplay::Found LaneReplay::check(const LaneSaved& event) {
    const Action next = machine_.next();
    if (!std::holds_alternative<DoSave>(next)) {
        return differs("the lane was saved a second time", name_of(next), "the lane saved");
    }
    const RegisterMap map(board_);
    const std::vector<FieldName> fields = fields_to_save(board_);
    for (std::size_t i = 0; i < std::max(fields.size(), event.saved.fields.size()); ++i) {
        const std::string wanted = i < fields.size() ? fields[i].text() : "nothing more";
        const bool more = i < event.saved.fields.size();
        const std::string found = more ? event.saved.fields[i].field.text() : "nothing more";
        if (wanted != found) return differs("another field was saved", wanted, found);
        const Result<FieldPlace> place = map.place(lane_, fields[i]);
        const SavedField& field = event.saved.fields[i];
        if (!place || place->address != field.address || place->mask != field.mask) {
            return differs("the place of " + wanted + " is another",
                           place ? std::to_string(place->address) : "no such field",
                           std::to_string(field.address));
        }
    }
    saved_ = event.saved;
    standing_ = codes_of(event.saved);
    return std::nullopt;
}

LaneReplay::Found LaneReplay::check(const Intent& event) {
    intent_ = event;
    const Action next = machine_.next();
    const auto* measure = std::get_if<DoMeasure>(&next);
    if (measure == nullptr) {
        return differs("the program would not take a reading here", name_of(next), "a reading");
    }
    if (measure->ordinal != event.ordinal || measure->attempt != event.attempt) {
        return differs("another reading would be taken here",
                       "reading " + std::to_string(measure->ordinal) + ", attempt " +
                           std::to_string(measure->attempt),
                       "reading " + std::to_string(event.ordinal) + ", attempt " +
                           std::to_string(event.attempt));
    }
    if (measure->stage != event.stage) {
        return differs("the reading belongs to another part of the job",
                       lanewright::name_of(measure->stage), lanewright::name_of(event.stage));
    }
    const std::string wanted = text_of(measure->request), found = text_of(event.request);
    if (wanted != found) return differs("another request would be made here", wanted, found);
    return std::nullopt;
}

// A chip without a strobe may hold its reset codes where a reset came in between.
std::optional<ReadingDifference> LaneReplay::check_record(const ReadingTaken& event) {
    auto first = readings_.check(intent_->request, event, standing_);
    if (!first || board_.strobe) return first;
    Codes reset;
    for (const DimensionDescription& dimension : board_.dimensions) {
        const FieldDescription* field = board_.map.find(dimension.field);
        if (field == nullptr || !field->reset) return first;
        reset.value.push_back(static_cast<std::int32_t>(*field->reset));
    }
    return readings_.check(intent_->request, event, reset) ? first : std::nullopt;
}

LaneReplay::Found LaneReplay::check(const ReadingTaken& event) {
    if (!intent_ || intent_->ordinal != event.ordinal || intent_->attempt != event.attempt) {
        Difference out = differs("a reading is stored that nothing asked for", "no reading",
                                 "reading " + std::to_string(event.ordinal));
        out.ordinal = event.ordinal;
        return out;
    }
    if (const auto wrong = check_record(event)) {
        Difference out = differs(wrong->what, wrong->expected, wrong->found);
        out.operation = wrong->operation;
        out.reg = wrong->reg;
        return out;
    }
    ++tally.readings;
    tally.operations += event.wire.size();
    standing_ = event.reading.codes;
    return std::nullopt;
}

LaneReplay::Found LaneReplay::check(const ReadingVoid& event) {
    if (!intent_ || intent_->ordinal != event.ordinal || intent_->attempt != event.attempt) {
        return differs("a void reading is stored that nothing asked for", "no reading",
                       "reading " + std::to_string(event.ordinal));
    }
    ++tally.void_readings;
    standing_ = intent_->request.codes;
    return std::nullopt;
}

LaneReplay::Found LaneReplay::check(const LaneDecided& event) {
    intent_.reset();
    const Action next = machine_.next();
    const auto* decide = std::get_if<DoDecide>(&next);
    if (decide == nullptr) {
        return differs("the program would not decide here", name_of(next), "a decision");
    }
    const std::string wanted = text_of(decide->decision), found = text_of(event.decision);
    if (wanted != found) return differs("the program would decide otherwise", wanted, found);
    decision_ = event.decision;
    return std::nullopt;
}

// Also where a run was stopped or a lane failed: it ends with the codes as found, or with the
// decided ones where these are to stay.
LaneReplay::Found LaneReplay::check(const LaneSettled& event) {
    intent_.reset();
    const Action next = machine_.next();
    if (event.settlement != Settlement::decided && event.settlement != Settlement::restored) {
        return std::nullopt;
    }
    const bool decided = event.settlement == Settlement::decided;
    if (decided && (!decision_ || !leave_)) {
        return differs("the decided codes were not to stay", "restored", "decided");
    }
    if (!saved_) return differs("a lane was settled before it was saved", name_of(next), "settled");
    const Codes wanted = decided ? decision_->codes : codes_of(*saved_);
    if (const auto* settle = std::get_if<DoSettle>(&next);
        settle != nullptr && settle->settlement == event.settlement && settle->codes != wanted) {
        return differs("other codes would be left", text_of(settle->codes), text_of(event.codes));
    }
    if (event.codes != wanted) {
        return differs("other codes were left on the lane", text_of(wanted), text_of(event.codes));
    }
    standing_ = event.codes;
    return std::nullopt;
}

LaneReplay::Found LaneReplay::check(const LaneFinished& event) {
    intent_.reset();
    tally.finished = true;
    const Action next = machine_.next();
    const auto* finish = std::get_if<DoFinish>(&next);
    // A fault of the board may end a lane at any time.
    if (finish == nullptr && event.outcome == LaneOutcome::failed) return std::nullopt;
    if (finish == nullptr) {
        return differs("the lane would not be finished here", name_of(next),
                       lanewright::name_of(event.outcome));
    }
    if (event.outcome == LaneOutcome::failed && finish->outcome != LaneOutcome::failed) {
        return std::nullopt;
    }
    if (finish->outcome != event.outcome || finish->reason != event.reason) {
        return differs("the lane would end otherwise",
                       std::string(lanewright::name_of(finish->outcome)) + ": " + finish->reason,
                       std::string(lanewright::name_of(event.outcome)) + ": " + event.reason);
    }
    return std::nullopt;
}

LaneReplay::Found LaneReplay::check(const PreflightItem& event) {
    intent_.reset();
    const Action next = machine_.next();
    const auto* conclude = std::get_if<DoConcludeItem>(&next);
    if (conclude == nullptr) {
        return differs("the program would conclude no item of the preflight here", name_of(next),
                       event.name);
    }
    const PreflightItem& item = conclude->item;
    if (item.name != event.name || item.result != event.result || item.found != event.found ||
        item.values != event.values) {
        return differs("the program would conclude this item otherwise",
                       item.name + ": " + lanewright::name_of(item.result) + ", " + item.found,
                       event.name + ": " + lanewright::name_of(event.result) + ", " + event.found);
    }
    return std::nullopt;
}

LaneReplay::Found LaneReplay::take(const StoredEvent& stored) {
    ++tally.events;
    Found found = std::visit([this](const auto& event) { return check(event); }, stored.event);
    if (!found) {
        try {
            machine_.apply(stored.event);
        } catch (const Diverged& diverged) {
            found = differs(diverged.what(), "another event", kind_of(stored.event));
        }
    }
    if (found) {
        found->run = stored.run;
        found->seq = stored.seq;
        found->event = kind_of(stored.event);
    }
    if (std::holds_alternative<ReadingTaken>(stored.event)) intent_.reset();
    return found;
}

LaneReplay::Found LaneReplay::end(bool complete) {
    if (!complete || tally.finished) return std::nullopt;
    const Action next = machine_.next();
    Difference out = differs("the run ended before this lane did", name_of(next), "no more events");
    out.event = "run_ended";
    return out;
}

void check_copy(const SourceFile& file, const char* what) {
    if (sha256_hex(file.text) == file.sha256) return;
    throw BadStoreData(std::string("the run's copy of its ") + what + " (" + file.path +
                       ") is not what its SHA-256 says: the store was altered. Restore it from a "
                       "copy");
}

std::vector<std::string> notes_of(const Manifest& manifest, const RunState& state) {
    std::vector<std::string> notes;
    const auto other = [&](const std::string& what, const std::string& then,
                           const std::string& now) {
        if (then != now) notes.push_back(what + " then: " + then + "; now: " + now);
    };
    other("version", manifest.version + " (" + manifest.git_hash + ")",
          program_version() + " (" + git_hash() + ")");
    other("build", manifest.build, build_description());
    other("CPU", manifest.cpu, cpu_description());
    if (!state.ended) {
        notes.push_back("the run was interrupted: what is stored of it was replayed");
    } else if (state.ended->ending != Ending::complete) {
        notes.push_back(std::string("the run ended early (") + name_of(state.ended->ending) +
                        "): what is stored of it was replayed");
    }
    return notes;
}

using EventsByLane = std::map<std::uint16_t, std::vector<const StoredEvent*>>;

EventsByLane by_lane(const Manifest& manifest, const std::vector<StoredEvent>& events) {
    EventsByLane lanes;
    for (const std::uint16_t lane : manifest.lanes) lanes[lane];
    for (const StoredEvent& event : events) {
        const auto lane = lane_of(event.event);
        if (lane) {
            lanes[number(*lane)].push_back(&event);
        } else if (std::holds_alternative<RunResumed>(event.event)) {
            for (auto& [every, its_events] : lanes) its_events.push_back(&event);
        }
    }
    return lanes;
}

bool same(const MonitorNoise& one, const MonitorNoise& other) {
    return one.height_step_mv == other.height_step_mv && one.width_step_ui == other.width_step_ui &&
           one.height_sigma_mv == other.height_sigma_mv &&
           one.width_sigma_ui == other.width_sigma_ui &&
           one.height_nonlinearity_mv == other.height_nonlinearity_mv &&
           one.width_nonlinearity_ui == other.width_nonlinearity_ui;
}

std::string text_of(const MonitorNoise& noise) {
    const nlohmann::json value{{"height_step_mv", noise.height_step_mv},
                               {"width_step_ui", noise.width_step_ui},
                               {"height_sigma_mv", noise.height_sigma_mv},
                               {"width_sigma_ui", noise.width_sigma_ui},
                               {"height_nonlinearity_mv", noise.height_nonlinearity_mv},
                               {"width_nonlinearity_ui", noise.width_nonlinearity_ui}};
    return value.dump();
}

std::string text_of(const Identity& identity) {
    std::string out = identity.simulated ? "simulated" : "not simulated";
    for (const IdentityValue& each : identity.values) {
        out += ", " + each.name + " " + std::to_string(each.value);
    }
    return out;
}

// The noise that a lane was told must be what the stored items of the preflight give.
std::optional<Difference> check_noise(const std::vector<StoredEvent>& events,
                                      const BoardFile& board) {
    RunState state;
    for (const StoredEvent& stored : events) {
        if (const auto* chosen = std::get_if<NoiseChosen>(&stored.event)) {
            const auto wanted = measured_noise(state, monitor_noise_of(board));
            if (!wanted || !same(*wanted, chosen->noise)) {
                Difference out;
                out.lane = chosen->lane;
                out.run = stored.run;
                out.seq = stored.seq;
                out.event = kind_of(stored.event);
                out.what = "the items of the preflight give another noise of the monitor";
                out.expected = wanted ? text_of(*wanted) : "no measured noise";
                out.found = text_of(chosen->noise);
                return out;
            }
        }
        state.apply(stored);
    }
    return std::nullopt;
}

// The identity stands in the manifest and in the first event, and part of it in the board file.
std::optional<Difference> check_identity(const Manifest& manifest, const RunState& state,
                                         const BoardFile& board) {
    Difference out;
    out.run = manifest.run;
    out.event = "manifest";
    out.found = text_of(manifest.identity);
    if (state.identity && *state.identity != manifest.identity) {
        out.what = "the run was begun with a board of another identity than its manifest has";
        out.expected = text_of(*state.identity);
        return out;
    }
    for (const IdentityExpectation& expected : board.identity.expect) {
        for (const IdentityValue& value : manifest.identity.values) {
            if (value.name != expected.name || value.value == expected.equals) continue;
            out.what = "the board file expects another " + expected.name;
            out.expected = expected.name + " " + std::to_string(expected.equals);
            return out;
        }
    }
    return std::nullopt;
}

// Whether the stored events could come of that seed, too.
bool follows_from(std::uint64_t seed, const Manifest& manifest, const RunFiles& files,
                  const std::vector<StoredEvent>& events) {
    for (const auto& [lane, lane_events] : by_lane(manifest, events)) {
        LaneMachine machine(lane_setup_of(files.board, files.recipe, Lane{lane}, seed));
        try {
            for (const StoredEvent* stored : lane_events) {
                const auto* decided = std::get_if<LaneDecided>(&stored->event);
                if (decided != nullptr) {
                    const Action next = machine.next();
                    const auto* decide = std::get_if<DoDecide>(&next);
                    if (decide == nullptr ||
                        text_of(decide->decision) != text_of(decided->decision))
                        return false;
                }
                machine.apply(stored->event);
            }
        } catch (const Diverged&) {
            return false;
        }
    }
    return true;
}

std::vector<std::string> not_checked_of(const Manifest& manifest, const RunFiles& files,
                                        const RunState& state,
                                        const std::vector<StoredEvent>& events) {
    std::vector<std::string> out;
    if (follows_from(manifest.seed ^ 1, manifest, files, events)) {
        out.emplace_back("the seed (another one gives the same events)");
    }
    out.emplace_back(state.identity ? "what the board itself reported as its identity"
                                    : "the identity (no event tells it)");
    out.emplace_back("items of the preflight that no lane's readings give");
    out.emplace_back("times, tags and condition");
    return out;
}

}  // namespace

StrictReport replay_strictly(const Manifest& manifest, const std::vector<StoredEvent>& events) {
    if (manifest.imported) {
        throw BadStoreData("run " + manifest.run + " was imported from " +
                           manifest.imported->readings_path +
                           ": it has no register operations to replay. Replay it with --recipe");
    }
    check_copy(manifest.board_file, "board file");
    check_copy(manifest.recipe_file, "recipe");
    const RunFiles files = files_of(manifest);
    const RegisterMap map(files.board);
    boost::asio::io_context io;
    VirtualTimeSource time(io);
    const RunState state = fold(events);
    std::size_t resets = 1;
    for (const auto& [lane, each] : state.lanes) resets += each.void_count + each.reset_count;
    ReadingCheck readings(files.board, map, time, resets);
    StrictReport report;
    report.run = manifest.run;
    report.notes = notes_of(manifest, state);
    report.difference = check_identity(manifest, state, files.board);
    if (!report.difference) report.difference = check_noise(events, files.board);
    if (report.difference) return report;
    const bool complete = state.ended && state.ended->ending == Ending::complete;
    for (const auto& [lane, lane_events] : by_lane(manifest, events)) {
        LaneReplay replay(lane_setup_of(files.board, files.recipe, Lane{lane}, manifest.seed),
                          files.board, readings, files.recipe.afterwards == Afterwards::leave);
        replay.tally.lane = lane;
        for (const StoredEvent* event : lane_events) {
            report.difference = replay.take(*event);
            if (report.difference) break;
        }
        if (!report.difference) report.difference = replay.end(complete);
        report.lanes.push_back(replay.tally);
        if (!report.difference) continue;
        report.difference->run = manifest.run;
        return report;
    }
    report.not_checked = not_checked_of(manifest, files, state, events);
    return report;
}

}  // namespace lanewright
