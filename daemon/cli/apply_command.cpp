#include <nlohmann/json.hpp>

#include "daemon/cli/board_at_hand.hpp"
#include "daemon/cli/commands.hpp"
#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/engine/tune.hpp"
#include "daemon/store/store_error.hpp"
#include "daemon/views/run_json.hpp"
#include "drivers/io/shutdown.hpp"

namespace lanewright {

namespace {

using json = nlohmann::ordered_json;

// The tuned fields only: applying codes is no reason to touch anything else.
SavedLane codes_alone(SavedLane lane) {
    std::erase_if(lane.fields, [](const SavedField& field) { return field.role != Role::tuned; });
    return lane;
}

RestoreNote note_for(const RunView& view, bool former) {
    RestoreNote note;
    note.board = view.manifest.board;
    note.identity = view.manifest.identity;
    note.run = view.manifest.run;
    for (const std::uint16_t number_of_lane : view.manifest.lanes) {
        const auto found = view.state.lanes.find(number_of_lane);
        if (found == view.state.lanes.end() || !found->second.saved) continue;
        const LaneState& lane = found->second;
        if (former) {
            note.set(codes_alone(*lane.saved));
        } else if (lane.decision) {
            note.set(codes_alone(with_codes(*lane.saved, lane.decision->codes)));
        }
    }
    return note;
}

Task<void> apply_on(Bench bench, RestoreNote note, Endpoint* endpoint, Store* store,
                    const RegisterMap* map, bool former) {
    auto identity = co_await bench.reader.identify();
    if (!identity) co_return identity.error();
    if (auto mended = co_await mend_board(*identity, bench, store, endpoint); !mended) {
        co_return mended.error();
    }
    // What the board file does not allow is refused before anything is noted or written.
    for (const SavedLane& lane : note.lanes) {
        if (auto allowed = map->check_codes(lane.lane, codes_of(lane)); !allowed) {
            co_return allowed.error();
        }
    }
    // The note stands while lanes are written, so that an interrupted apply is finished later.
    note.endpoint = endpoint->name();
    note.store = store->path();
    if (same_board(note.identity, *identity)) {
        if (auto noted = write_note(bench.note_path, note); !noted) co_return noted.error();
    }
    std::string why = former ? "apply --former" : "apply";
    auto settling = settle_note(std::move(note), *identity, bench, true, std::move(why));
    co_return co_await std::move(settling);
}

Task<void> apply_at_hand(BoardAtHand* at_hand, RestoreNote note, Store* store, Workers* workers,
                         TimeSource* time, Stop stop, bool former) {
    auto board = co_await reach(at_hand->file, time);
    if (!board) co_return board.error();
    std::function<LinkCounts()> counts = [] { return LinkCounts{}; };
    std::function<void(const std::string&)> say = [](const std::string& text) {
        print_error("lanewright: " + text);
    };
    Endpoint& endpoint = at_hand->endpoint;
    Bench bench{(*board)->lanes(),    *store, *workers, *time, stop,
                endpoint.note_path(), {},     counts,   say};
    auto applying =
        apply_on(std::move(bench), std::move(note), &endpoint, store, &(*board)->map(), former);
    auto written = co_await std::move(applying);
    auto closed = co_await (*board)->close();
    if (written && !closed) co_return closed.error();
    co_return written;
}

void report_applied(const RunView& view, const RestoreNote& note, bool as_json) {
    json lanes = json::array();
    for (const SavedLane& lane : note.lanes) {
        const json codes = codes_json(view.space, codes_of(lane));
        lanes.push_back({{"lane", number(lane.lane)}, {"codes", codes}});
        if (!as_json) {
            print("lane " + std::to_string(number(lane.lane)) + ": " + codes.dump() +
                  " written and read back\n");
        }
    }
    for (const std::uint16_t lane : view.manifest.lanes) {
        const bool named = std::any_of(note.lanes.begin(), note.lanes.end(),
                                       [&](const auto& l) { return number(l.lane) == lane; });
        if (!named) print_error("lane " + std::to_string(lane) + ": the run has no codes for it");
    }
    if (!as_json) return;
    print(json{{"format", "lanewright-apply/1"},
               {"run", view.manifest.run},
               {"board", view.manifest.board},
               {"simulated", view.manifest.identity.simulated},
               {"lanes", std::move(lanes)}}
              .dump(2) +
          "\n");
}

int apply(const ApplyOptions& options) {
    auto at_hand = take_board(options.board_path, options.link);
    if (!at_hand) return report(at_hand.error(), options.json);
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    Stop stop(io);
    const ShutdownSignals signals(io, stop);
    const std::string path = options.store_path.empty() ? default_store_path() : options.store_path;
    std::optional<RunView> view;
    {
        const Database database(path, Database::Mode::read_only);
        view = view_of(database.find_run(options.run), database);
    }
    if (view->manifest.imported) {
        Fault fault;
        fault.cause = Cause::bad_data;
        fault.what = "run " + view->manifest.run +
                     " was imported: which board its codes belong to is not known";
        return report(fault, options.json);
    }
    const RestoreNote note = note_for(*view, options.former);
    if (note.lanes.empty()) {
        Fault fault;
        fault.cause = Cause::bad_data;
        fault.what = "run " + view->manifest.run + " has no codes to write";
        return report(fault, options.json);
    }
    auto store = Store::open(path, time);
    if (!store) return report(store.error(), options.json);
    Workers workers(time, 1);
    auto applied = run_until_done(
        time, apply_at_hand(&*at_hand, note, store->get(), &workers, &time, stop, options.former));
    if (!applied) return report(applied.error(), options.json);
    report_applied(*view, note, options.json);
    return exit_ok;
}

}  // namespace

int run_apply(const ApplyOptions& options) {
    try {
        return apply(options);
    } catch (const StoreError& error) {
        return report(error.fault(), options.json);
    }
}

}  // namespace lanewright
