#pragma once
// Purpose:   a bench for engine tests: temporary folders, a store, a fake board, virtual time.
// Ownership: removes its folder.
// Threads:   the test's own, plus the store's and one worker.

#include <boost/asio/io_context.hpp>
#include <cstdlib>
#include <filesystem>
#include <memory>
#include <string>

#include "daemon/engine/tune.hpp"
#include "tests/daemon/fake_board.hpp"

namespace lanewright::test {

class TemporaryFolder {
  public:
    TemporaryFolder() {
        std::string pattern =
            (std::filesystem::temp_directory_path() / "lanewright-XXXXXX").string();
        path_ = ::mkdtemp(pattern.data());
    }
    ~TemporaryFolder() {
        std::error_code error;
        std::filesystem::remove_all(path_, error);
    }
    TemporaryFolder(const TemporaryFolder&) = delete;
    TemporaryFolder& operator=(const TemporaryFolder&) = delete;
    std::string operator/(const std::string& name) const { return path_ + "/" + name; }
    const std::string& path() const { return path_; }

  private:
    std::string path_;
};

inline BoardFile demo_board() {
    Complaints complaints;
    auto board = load_board_file(LANEWRIGHT_SOURCE_DIR "/configs/boards/demo.json", complaints);
    if (!board) throw std::runtime_error(complaints.text());
    return std::move(*board);
}

inline Recipe demo_recipe() {
    Complaints complaints;
    auto recipe = load_recipe(LANEWRIGHT_SOURCE_DIR "/configs/recipes/demo.json", complaints);
    if (!recipe) throw std::runtime_error(complaints.text());
    recipe->strategy.name = "descent";
    return std::move(*recipe);
}

// What one start of the program does; several starts share a folder and a board.
struct Start {
    Result<TuneOutcome> outcome = Fault{};
    RunId run;
    RunState state;
    std::vector<StoredEvent> events;
    std::vector<std::string> said;
};

struct StartOptions {
    std::vector<std::uint16_t> lanes{0, 1, 2};
    std::uint64_t seed = 1;
    bool anew = false;
    std::string store = "store.db";
    unsigned threads = 1;
    Recipe recipe = demo_recipe();
    BoardFile board = demo_board();
    std::string condition;
    // Off where a test is about something else: it takes readings of its own.
    bool preflight = false, only_preflight = false;
    // Sees each event once it is durable; may ask for a stop.
    std::function<void(const StoredEvent&, Stop&)> on_event;
};

class EngineBench {
  public:
    EngineBench() {
        ::setenv("LANEWRIGHT_LOCK_DIR", (folder / "locks").c_str(), 1);
        ::setenv("XDG_STATE_HOME", (folder / "state").c_str(), 1);
    }

    // One start on a board whose codes persist between starts; `prepare` may plant faults.
    Start start(
        const StartOptions& options,
        const std::function<void(FakeBoard&)>& prepare = [](FakeBoard&) {}) {
        boost::asio::io_context io;
        VirtualTimeSource time(io);
        FakeBoard board(time, 8);
        if (!board_codes.empty()) board.codes_ = board_codes;
        board.serial = serial;
        prepare(board);
        Start out;
        const LinkDescription link = TcpLinkDescription{"127.0.0.1", 40125};
        auto endpoint = Endpoint::take(link);
        if (!endpoint) {
            out.outcome = endpoint.error();
            return out;
        }
        auto store = Store::open(folder / options.store, time);
        if (!store) {
            out.outcome = store.error();
            return out;
        }
        Workers workers(time, options.threads);
        Stop stop(io);
        Watcher watcher;
        watcher.stop = &stop;
        watcher.on = options.on_event;
        Bench bench{board,
                    **store,
                    workers,
                    time,
                    stop,
                    endpoint->note_path(),
                    {&watcher},
                    [&board] { return LinkCounts{0, 0, 0, 0, board.resets}; },
                    [&out](const std::string& text) { out.said.push_back(text); }};
        TuneRequest request;
        request.board = options.board;
        request.condition = options.condition;
        request.preflight = options.preflight;
        request.only_preflight = options.only_preflight;
        request.recipe = options.recipe;
        request.lanes = options.lanes;
        request.link = text_of(link);
        request.seed = options.seed;
        request.anew = options.anew;
        out.outcome = run_until_done(
            time, tune_board(std::move(request), bench, store->get(), &*endpoint, &out.run));
        if (!out.run.empty()) {
            out.events = (*store)->events(out.run);
            out.state = fold(out.events);
        }
        board_codes = board.codes_;
        log = board.log;
        most_at_once = board.most_at_once;
        note_path = endpoint->note_path();
        return out;
    }

    TemporaryFolder folder;
    std::map<std::uint16_t, Codes> board_codes;
    std::vector<std::string> log;
    std::size_t most_at_once = 0;
    std::string note_path;
    std::uint32_t serial = 7;

  private:
    struct Watcher : Observer {
        Stop* stop = nullptr;
        std::function<void(const StoredEvent&, Stop&)> on;
        void on_event(const StoredEvent& event) noexcept override {
            if (on) on(event, *stop);
        }
    };
};

}  // namespace lanewright::test
