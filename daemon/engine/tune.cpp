#include "daemon/engine/tune.hpp"

#include <unistd.h>

#include <algorithm>
#include <filesystem>
#include <utility>

#include "daemon/engine/preflight.hpp"
#include "daemon/engine/version.hpp"

namespace lanewright {

namespace {

SourceFile source_of(const std::string& path, const std::string& text) {
    return {path, sha256_hex(text), text};
}

std::string absolute(const std::string& path) {
    std::error_code error;
    const auto whole = std::filesystem::absolute(path, error);
    return error ? path : whole.lexically_normal().string();
}

Manifest manifest_of(const TuneRequest& request, const Identity& identity) {
    Manifest manifest = manifest_begun_now();
    manifest.board_file = source_of(request.board.path, request.board.source);
    manifest.recipe_file = source_of(request.recipe.path, request.recipe.source);
    manifest.board = request.board.name;
    manifest.recipe = request.recipe.name;
    manifest.link = request.link;
    manifest.identity = identity;
    manifest.lanes = request.lanes;
    manifest.waves = waves_of(request.lanes);
    manifest.seed = request.seed;
    manifest.tags = request.tags;
    manifest.condition = request.condition;
    manifest.purpose = request.only_preflight ? Purpose::preflight : Purpose::tune;
    return manifest;
}

// Everything that decisions may depend on, besides the readings, is the same.
bool same_job(const Manifest& one, const Manifest& other) {
    return one.board_file.sha256 == other.board_file.sha256 &&
           one.recipe_file.sha256 == other.recipe_file.sha256 && one.lanes == other.lanes &&
           one.seed == other.seed && one.condition == other.condition && one.tags == other.tags &&
           same_board(one.identity, other.identity);
}

// A later run has moved lanes of this one: what this one saved is no longer what stood there.
bool shares_lanes(const Manifest& one, const Manifest& other) {
    return same_board(one.identity, other.identity) &&
           std::any_of(one.lanes.begin(), one.lanes.end(), [&](std::uint16_t lane) {
               return std::find(other.lanes.begin(), other.lanes.end(), lane) != other.lanes.end();
           });
}

struct Beginning {
    Manifest manifest;
    std::vector<StoredEvent> history;
    bool resumed = false;
};

// The newest run of the same job that did not come to its end, or a new one. One whose lanes are
// all finished but whose end was not stored is closed by resuming it.
Beginning beginning_of(const TuneRequest& request, const Identity& identity, const Store& store) {
    Beginning out;
    out.manifest = manifest_of(request, identity);
    if (request.anew || request.only_preflight) return out;
    const std::vector<RunRow> rows = store.runs();
    for (auto row = rows.rbegin(); row != rows.rend(); ++row) {
        if (row->manifest.purpose == Purpose::preflight) continue;  // it left no code behind
        if (!same_job(row->manifest, out.manifest)) {
            if (shares_lanes(row->manifest, out.manifest)) return out;
            continue;
        }
        std::vector<StoredEvent> history = store.events(row->id);
        const RunState state = fold(history);
        if (state.ended && state.ended->ending == Ending::complete) return out;
        return {row->manifest, std::move(history), true};
    }
    return out;
}

// Readings of the one say what those of the other will be like.
bool same_bench(const Manifest& one, const Manifest& other) {
    return one.board_file.sha256 == other.board_file.sha256 && one.condition == other.condition &&
           one.tags == other.tags && same_board(one.identity, other.identity);
}

// What earlier runs have measured of the board under these settings; of each item the newest, and
// none where that one failed. Copies of still earlier ones are left out: they name their origin.
std::vector<PreflightItem> known_items(const Manifest& manifest, const std::string& settings,
                                       const Store& store) {
    std::vector<PreflightItem> out;
    std::vector<std::string> wanted = board_items();
    const std::vector<RunRow> rows = store.runs();
    for (auto row = rows.rbegin(); row != rows.rend() && !wanted.empty(); ++row) {
        if (!same_bench(row->manifest, manifest)) continue;
        std::vector<PreflightItem> items = store.preflight_items(row->id);
        for (auto item = items.rbegin(); item != items.rend(); ++item) {
            const auto name = std::find(wanted.begin(), wanted.end(), item->name);
            const bool measured = item->from.empty() && item->result != ItemResult::not_shown;
            if (name == wanted.end() || !measured || item->settings != settings) continue;
            wanted.erase(name);
            if (item->result == ItemResult::failed) continue;
            item->from = row->id;
            out.push_back(std::move(*item));
        }
    }
    return out;
}

// The note at bench.note_path, if there is one.
Task<void> mend_note(Identity present, Bench bench, Store* store) {
    auto note = read_note(bench.note_path);
    if (!note) co_return note.error();
    if (!*note) co_return Result<void>{};
    const RestoreNote& left = **note;
    bool known = false;
    if (store != nullptr && absolute(left.store) == absolute(store->path())) {
        const std::vector<RunRow> rows = store->runs();
        known = std::any_of(rows.begin(), rows.end(),
                            [&](const RunRow& row) { return row.id == left.run; });
    }
    std::string lanes;
    for (const SavedLane& lane : left.lanes) lanes += " " + std::to_string(number(lane.lane));
    bench.say("run " + left.run + " left codes to restore; writing lanes" + lanes + " first");
    const RunId run = left.run;
    auto settling = settle_note(std::move(**note), std::move(present), bench, known,
                                "restored at the next contact after run " + run);
    auto settled = co_await std::move(settling);
    if (settled) co_return Result<void>{};
    Fault fault = settled.error();
    if (fault.hint.empty()) {
        fault.hint = "Codes that an earlier run left still wait in " + bench.note_path +
                     "; nothing else is started on this board before they are written";
    }
    co_return fault;
}

}  // namespace

Manifest manifest_begun_now() {
    Manifest manifest;
    manifest.started_ns = utc_now_ns();
    manifest.run = new_run_id(manifest.started_ns);
    manifest.zone = local_zone_offset();
    manifest.version = program_version();
    manifest.git_hash = git_hash();
    manifest.build = build_description();
    manifest.cpu = cpu_description();
    manifest.host = host_name();
    manifest.pid = ::getpid();
    return manifest;
}

Task<void> mend_board(Identity present, Bench bench, Store* store, Endpoint* endpoint) {
    if (auto held = endpoint->hold_board(present); !held) co_return held.error();
    for (const std::string& path : endpoint->notes()) {
        Bench at_note = bench;
        at_note.note_path = path;
        if (auto mended = co_await mend_note(present, at_note, store); !mended) {
            co_return mended.error();
        }
    }
    co_return endpoint->describe("", "");
}

Task<TuneOutcome> tune_board(TuneRequest request, Bench bench, Store* store, Endpoint* endpoint,
                             RunId* began) {
    auto identity = co_await bench.reader.identify();
    if (!identity) co_return identity.error();
    if (auto mended = co_await mend_board(*identity, bench, store, endpoint); !mended) {
        co_return mended.error();
    }
    Beginning beginning = beginning_of(request, *identity, *store);
    const RunId run = beginning.manifest.run;
    *began = run;
    std::vector<Event> first;
    if (beginning.resumed) {
        bench.say("resuming run " + run + "; --new starts another");
        first.push_back(RunResumed{::getpid(), "resumed by " + host_name()});
    } else {
        if (auto added = co_await store->add_run(beginning.manifest); !added)
            co_return added.error();
        bench.say("run " + run);
        first.push_back(Identified{*identity});
    }
    auto stored = co_await bench.journal.append(run, std::move(first));
    if (!stored) co_return stored.error();
    std::move(stored->begin(), stored->end(), std::back_inserter(beginning.history));
    if (auto told = endpoint->describe(absolute(store->path()), run); !told) co_return told.error();

    RunPlan plan;
    plan.note.endpoint = endpoint->name();
    plan.note.board = request.board.name;
    plan.note.identity = *identity;
    plan.note.run = run;
    plan.note.store = absolute(store->path());
    plan.preflight = request.preflight || request.only_preflight;
    plan.only_preflight = request.only_preflight;
    if (plan.preflight && !plan.only_preflight) {
        const MarginWanted reading{
            request.recipe.search_error_ratio, dwell_bits_of(request.board, request.recipe), {}};
        plan.known = known_items(beginning.manifest, settings_of(reading), *store);
    }
    plan.manifest = std::move(beginning.manifest);
    plan.board = std::move(request.board);
    plan.recipe = std::move(request.recipe);
    auto ended = co_await run_board(std::move(plan), std::move(beginning.history), bench);
    auto told_again = endpoint->describe(absolute(store->path()), run);
    if (!ended) co_return ended.error();
    if (!told_again) co_return told_again.error();
    TuneOutcome outcome{run, std::move(*ended)};
    co_return outcome;
}

}  // namespace lanewright
