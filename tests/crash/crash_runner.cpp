// Runs a tune as `lanewright tune` does, and kills itself with SIGKILL at a stated point: after the
// Nth event of a kind became durable, before or after the Nth write to the link, or after the Nth
// piece of an answer. Without --die it counts how many such points there are.

#include <signal.h>
#include <unistd.h>

#include <cstdio>
#include <cstdlib>
#include <cstring>
#include <map>
#include <string>

#include "daemon/engine/tune.hpp"
#include "drivers/board/board.hpp"
#include "drivers/board/make_link.hpp"

namespace {

using namespace lanewright;

// Counts what passes, and dies at the point asked for.
class Reaper {
  public:
    void set(std::string point, std::uint64_t count) {
        point_ = std::move(point);
        at_ = count;
    }
    void pass(const std::string& point) {
        const std::uint64_t now = ++passed_[point];
        if (point == point_ && now == at_) ::kill(::getpid(), SIGKILL);
    }
    const std::map<std::string, std::uint64_t>& passed() const { return passed_; }

  private:
    std::string point_;
    std::uint64_t at_ = 0;
    std::map<std::string, std::uint64_t> passed_;
};

class MortalJournal : public Journal {
  public:
    MortalJournal(Journal& journal, Reaper& reaper) : journal_(journal), reaper_(reaper) {}

    Task<std::vector<StoredEvent>> append(RunId run, std::vector<Event> events) override {
        auto stored = co_await journal_.append(std::move(run), std::move(events));
        if (stored) {
            for (const StoredEvent& event : *stored) {
                reaper_.pass("stored");
                reaper_.pass(std::string("stored.") + kind_of(event.event));
            }
        }
        co_return stored;
    }

  private:
    Journal& journal_;
    Reaper& reaper_;
};

class MortalLink : public Link {
  public:
    MortalLink(std::unique_ptr<Link> link, Reaper& reaper)
        : link_(std::move(link)), reaper_(reaper) {}

    Task<void> open(TimePoint deadline) override { return link_->open(deadline); }
    Task<std::size_t> read_some(std::span<std::byte> buffer) override {
        auto got = co_await link_->read_some(buffer);
        reaper_.pass("received");
        co_return got;
    }
    Task<void> write(Bytes bytes) override {
        reaper_.pass("sending");
        auto written = co_await link_->write(std::move(bytes));
        reaper_.pass("sent");
        co_return written;
    }
    void close() noexcept override { link_->close(); }
    bool is_open() const override { return link_->is_open(); }
    const LinkTraits& traits() const override { return link_->traits(); }

  private:
    std::unique_ptr<Link> link_;
    Reaper& reaper_;
};

struct Options {
    std::string board, recipe, link, store, die;
    std::uint64_t seed = 1;
};

Options options_from(int count, char** words) {
    std::map<std::string, std::string> given;
    for (int i = 1; i + 1 < count; i += 2) given[words[i]] = words[i + 1];
    Options out{given["--board"], given["--recipe"], given["--link"], given["--store"],
                given["--die"]};
    if (given.contains("--seed")) out.seed = std::stoull(given["--seed"]);
    return out;
}

[[noreturn]] void give_up(const std::string& text) {
    std::fprintf(stderr, "crash_runner: %s\n", text.c_str());
    std::exit(70);
}

Task<TuneOutcome> tune_mortally(BoardFile file, TuneRequest request, Store* store,
                                Endpoint* endpoint, TimeSource* time, Workers* workers, Stop stop,
                                Reaper* reaper) {
    auto link = std::make_unique<MortalLink>(make_link(*time, file.link), *reaper);
    auto board = co_await open_board(std::move(file), std::move(link), *time);
    if (!board) co_return board.error();
    MortalJournal journal(*store, *reaper);
    std::function<LinkCounts()> counts = [] { return LinkCounts{}; };
    std::function<void(const std::string&)> say = [](const std::string&) {};
    Bench bench{(*board)->lanes(),     journal, *workers, *time, stop,
                endpoint->note_path(), {},      counts,   say};
    RunId began;
    auto outcome = co_await tune_board(std::move(request), bench, store, endpoint, &began);
    auto closed = co_await (*board)->close();
    if (outcome && !closed) co_return closed.error();
    co_return outcome;
}

int run(int count, char** words) {
    const Options options = options_from(count, words);
    Reaper reaper;
    if (const std::size_t colon = options.die.find(':'); colon != std::string::npos) {
        reaper.set(options.die.substr(0, colon), std::stoull(options.die.substr(colon + 1)));
    }
    Complaints complaints;
    auto board = load_board_file(options.board, complaints);
    auto recipe = load_recipe(options.recipe, complaints);
    if (!board || !recipe) give_up(complaints.text());
    std::string why;
    auto link = parse_link(options.link, board->link, why);
    if (!link) give_up(why);
    board->link = *link;
    auto endpoint = Endpoint::take(board->link);
    if (!endpoint) give_up(endpoint.error().text());
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    auto store = Store::open(options.store, time);
    if (!store) give_up(store.error().text());
    Workers workers(time, 1);
    Stop stop(io);
    TuneRequest request;
    for (std::uint16_t lane = 0; lane < board->map.lane_count; ++lane)
        request.lanes.push_back(lane);
    if (recipe->lanes) request.lanes = *recipe->lanes;
    request.board = *board;
    request.recipe = std::move(*recipe);
    request.link = text_of(board->link);
    request.seed = options.seed;
    auto outcome = run_until_done(time, tune_mortally(*board, std::move(request), store->get(),
                                                      &*endpoint, &time, &workers, stop, &reaper));
    if (!outcome) give_up(outcome.error().text());
    std::printf("{");
    const char* comma = "";
    for (const auto& [point, passed] : reaper.passed()) {
        std::printf("%s\"%s\": %llu", comma, point.c_str(),
                    static_cast<unsigned long long>(passed));
        comma = ", ";
    }
    std::printf("}\n");
    return 0;
}

}  // namespace

int main(int count, char** words) {
    try {
        return run(count, words);
    } catch (const std::exception& error) {
        give_up(error.what());
    }
}
