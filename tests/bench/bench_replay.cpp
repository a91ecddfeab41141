// What it costs to ask a log instead of a board: a log of every code is stored and loaded again,
// and a thousand descents from other codes are replayed on it by two threads. How far the best of
// that log flatters itself, and how far its shrunk score does.
// usage: bench_replay

#include <boost/asio/io_context.hpp>
#include <chrono>
#include <cmath>
#include <iostream>
#include <stdexcept>
#include <thread>
#include <vector>

#include "adapt/stats/random.hpp"
#include "daemon/replay/counterfactual.hpp"
#include "daemon/replay/import.hpp"
#include "daemon/views/lane_result.hpp"
#include "tests/bench/rows.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::bench;

namespace {

constexpr std::size_t descents = 1000;
constexpr unsigned threads = 2;
constexpr double height_sigma_mv = 2, width_sigma_ui = 0.012;  // of one edge

double seconds_since(std::chrono::steady_clock::time_point start) {
    return std::chrono::duration<double>(std::chrono::steady_clock::now() - start).count();
}

// A narrow ridge across the banks, as a landscape of stated numbers; not the simulated board.
double openness(const Codes& codes) {
    const double r1 = (codes.value[0] - 13.4) / 31, r2 = (codes.value[1] - 7.7) / 15;
    const double c1 = (codes.value[2] - 9.2) / 15, c2 = (codes.value[3] - 2.6) / 7;
    const double along = r1 + r2 + c1, across = r1 - 0.8 * c1, off = r2 - 0.5 * c2;
    return std::exp(-0.5 * along * along - 6 * across * across - 4 * off * off - 0.8 * c2 * c2);
}

Reading reading_of(const Codes& codes, std::uint32_t ordinal) {
    Random noise({1, 0, 0, ordinal});
    const double open = openness(codes);
    const auto edge = [&](double value, double sigma) {
        return Measured{value * open + sigma * noise.normal(), sigma, Bound::exact};
    };
    Reading reading;
    reading.codes = codes;
    reading.status = Status::open;
    reading.up_mv = edge(70, height_sigma_mv);
    reading.down_mv = edge(60, height_sigma_mv);
    reading.left_ui = edge(0.42, width_sigma_ui);
    reading.right_ui = edge(0.40, width_sigma_ui);
    reading.error_ratio = 1e-6;
    reading.bit_count = std::uint64_t{1} << 31;
    reading.cost_s = 0.087;
    return reading;
}

double true_score(const Codes& codes, const Required& required) {
    const double open = openness(codes);
    return std::min(2 * 60 * open / required.height_mv, 2 * 0.40 * open / required.width_ui);
}

ImportedRun every_code(const CodeSpace& space) {
    ImportedRun run;
    run.lanes = {0};
    run.simulated = true;
    SavedLane saved;
    for (const Dimension& dimension : space.dimensions()) {
        SavedField field;
        field.role = Role::tuned;
        field.dimension = dimension.name;
        field.value = static_cast<std::uint32_t>(dimension.lowest);
        saved.fields.push_back(std::move(field));
    }
    run.events.push_back(LaneSaved{saved});
    for (std::uint64_t index = 0; index < space.size(); ++index) {
        const auto ordinal = static_cast<std::uint32_t>(index);
        Request request;
        request.codes = space.at(index);
        request.what = MarginWanted{1e-6, std::uint64_t{1} << 31, {}};
        ReadingTaken taken{Lane{0}, ordinal, 0, reading_of(request.codes, ordinal), {}};
        run.events.push_back(Intent{Lane{0}, ordinal, 0, Stage::search, std::move(request)});
        run.events.push_back(std::move(taken));
        ++run.row_count;
    }
    return run;
}

struct Stored {
    double stored_s = 0, loaded_s = 0;
    RunState state;
};

Stored store_and_load(ImportedRun run, const BoardFile& board) {
    const test::TemporaryFolder folder;
    const std::string path = folder / "store.db";
    Stored out;
    auto start = std::chrono::steady_clock::now();
    {
        boost::asio::io_context io;
        SteadyTimeSource time(io);
        auto store = Store::open(path, time);
        if (!store) throw std::runtime_error(store.error().text());
        Manifest manifest = manifest_of(run, {}, board, {board.path, "", board.source}, Import{});
        auto done = run_until_done(
            time, store_run(store->get(), std::move(manifest), std::move(run.events)));
        if (!done) throw std::runtime_error(done.error().text());
    }
    out.stored_s = seconds_since(start);
    start = std::chrono::steady_clock::now();
    const Database database(path, Database::Mode::read_only);
    out.state = view_of(database.find_run("latest"), database).state;
    out.loaded_s = seconds_since(start);
    return out;
}

struct Tally {
    double readings = 0, attainment = 0, raw = 0, shrunk = 0;
    std::size_t lanes = 0, undecided = 0;
};

void replay_some(const BoardFile& board, const Recipe& recipe, const ReadingLog& log,
                 const LogScores& scores, double best, unsigned part, Tally& tally) {
    const CodeSpace space = code_space_of(board);
    for (std::size_t i = part; i < descents; i += threads) {
        Random random({2, 0, 0, static_cast<std::uint32_t>(i)});
        Codes start = space.at(random.below(space.size()));
        while (!space.allows(start)) start = space.at(random.below(space.size()));
        const ReplayedLane lane =
            replay_lane(replay_problem_of(board, recipe, Lane{0}, 1, start), log, scores);
        if (!lane.decision || !lane.selected || !lane.selected->score) {
            ++tally.undecided;
            continue;
        }
        const double truth = true_score(lane.decision->codes, recipe.required);
        ++tally.lanes;
        tally.readings += static_cast<double>(lane.handed_out);
        tally.attainment += truth / best;
        tally.raw += (lane.selected->raw.value - truth) / best;
        tally.shrunk += (*lane.selected->score - truth) / best;
    }
}

Tally replay_all(const BoardFile& board, const Recipe& recipe, const ReadingLog& log,
                 const LogScores& scores, double best) {
    std::vector<Tally> tallies(threads);
    std::vector<std::thread> running;
    for (unsigned part = 0; part < threads; ++part) {
        running.emplace_back(
            [&, part] { replay_some(board, recipe, log, scores, best, part, tallies[part]); });
    }
    Tally all;
    for (unsigned part = 0; part < threads; ++part) {
        running[part].join();
        all.lanes += tallies[part].lanes;
        all.undecided += tallies[part].undecided;
        all.readings += tallies[part].readings;
        all.attainment += tallies[part].attainment;
        all.raw += tallies[part].raw;
        all.shrunk += tallies[part].shrunk;
    }
    return all;
}

void print_descents(Rows& rows, const Tally& tally, double seconds) {
    const auto row = [&](const char* name, double value, const char* unit, Better better) {
        rows.row({.name = name,
                  .value = value,
                  .unit = unit,
                  .better = better,
                  .n = tally.lanes,
                  .seed = 1});
    };
    rows.row({.name = "replay.descents_1000",
              .value = seconds,
              .unit = "s",
              .must = 60,
              .n = descents,
              .seed = 1});
    const auto lanes = static_cast<double>(std::max<std::size_t>(tally.lanes, 1));
    row("replay.descent.readings", tally.readings / lanes, "", Better::less);
    row("replay.descent.attainment", tally.attainment / lanes, "", Better::more);
    row("replay.descent.luck_raw", tally.raw / lanes, "of best", Better::less);
    row("replay.descent.luck_shrunk", std::abs(tally.shrunk) / lanes, "of best", Better::less);
    rows.row({.name = "replay.undecided",
              .value = static_cast<double>(tally.undecided),
              .unit = "",
              .must = 0,
              .n = descents,
              .seed = 1});
}

}  // namespace

int main() {
    Rows rows(std::cout);
    const BoardFile board = test::demo_board();
    Recipe recipe = test::demo_recipe();
    const CodeSpace space = code_space_of(board);
    double best = 0;
    for (std::uint64_t index = 0; index < space.size(); ++index) {
        const Codes codes = space.at(index);
        if (space.allows(codes)) best = std::max(best, true_score(codes, recipe.required));
    }
    const Stored stored = store_and_load(every_code(space), board);
    rows.row({.name = "replay.store_65536", .value = stored.stored_s, .unit = "s", .n = 1});
    rows.row({.name = "replay.load_65536", .value = stored.loaded_s, .unit = "s", .n = 1});

    auto start = std::chrono::steady_clock::now();
    const ReadingLog log(stored.state.lanes.at(0).readings);
    const ReplayProblem problem = replay_problem_of(board, recipe, Lane{0}, 1, space.at(0));
    const LogScores scores = scores_of(problem, log);
    rows.row({.name = "replay.index_65536", .value = seconds_since(start), .unit = "s", .n = 1});

    start = std::chrono::steady_clock::now();
    const Tally tally = replay_all(board, recipe, log, scores, best);
    print_descents(rows, tally, seconds_since(start));

    recipe.strategy.name = "exhaustive";
    recipe.budget = {};
    start = std::chrono::steady_clock::now();
    const ReplayedLane all =
        replay_lane(replay_problem_of(board, recipe, Lane{0}, 1, space.at(0)), log, scores);
    rows.row({.name = "replay.exhaustive",
              .value = seconds_since(start),
              .unit = "s",
              .n = all.handed_out,
              .seed = 1});
    return rows.finish();
}
