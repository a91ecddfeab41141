#include <algorithm>
#include <cmath>
#include <cstdio>
#include <nlohmann/json.hpp>

#include "daemon/cli/board_at_hand.hpp"
#include "daemon/cli/commands.hpp"
#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/views/run_text.hpp"
#include "drivers/board/check.hpp"

namespace lanewright {

namespace {

using json = nlohmann::ordered_json;

double milliseconds(std::chrono::nanoseconds time) {
    return std::chrono::duration<double, std::milli>(time).count();
}

// Upper end of a bin of the histogram: 2^i microseconds.
double bin_end_ms(std::size_t bin) {
    return std::ldexp(1e-3, static_cast<int>(bin));
}

Task<CheckReport> check_at_hand(const BoardAtHand* at_hand, TimeSource* time) {
    auto board = co_await reach(at_hand->file, time);
    if (!board) co_return board.error();
    auto checked = co_await check_board(**board);
    auto closed = co_await (*board)->close();
    if (checked && !closed) co_return closed.error();
    co_return checked;
}

json report_json(const CheckReport& report, const BoardFile& file, const std::string& pending) {
    json identity = json::object(), trials = json::array(), histogram = json::array();
    for (const IdentityValue& value : report.identity.values) identity[value.name] = value.value;
    for (const ScratchTrial& trial : report.trials) {
        trials.push_back({{"written", trial.written}, {"read", trial.read}});
    }
    for (std::size_t bin = 0; bin < RoundTrips::bin_count; ++bin) {
        const std::uint64_t count = report.round_trips.bins()[bin];
        if (count > 0) histogram.push_back({{"up_to_ms", bin_end_ms(bin)}, {"count", count}});
    }
    return {{"format", "lanewright-check/1"},
            {"board", file.name},
            {"good", report.good() && pending.empty()},
            {"simulated", report.identity.simulated},
            {"identity", std::move(identity)},
            {"link", report.link_name},
            {"dialect", report.dialect},
            {"scratch",
             {{"field", report.scratch.text()},
              {"trials", std::move(trials)},
              {"put_back", report.scratch_put_back}}},
            {"link_counts",
             {{"frames", report.link.frames},
              {"bad_frames", report.link.bad_frames},
              {"retries", report.link.retries},
              {"reconnects", report.link.reconnects},
              {"resets", report.link.resets},
              {"bad_frames_at_board", report.link.board_bad_frames}}},
            {"round_trips_ms",
             {{"count", report.round_trips.count()},
              {"mean", milliseconds(report.round_trips.mean())},
              {"longest", milliseconds(report.round_trips.longest())},
              {"histogram", std::move(histogram)}}},
            {"restore_pending", pending.empty() ? json(nullptr) : json(pending)},
            {"warnings", report.warnings}};
}

void print_report(const CheckReport& report, const BoardFile& file, const std::string& pending) {
    char line[160];
    const auto say = [&line](const char* pattern, auto... values) {
        std::snprintf(line, sizeof line, pattern, values...);
        print(printable(line));
    };
    say("board %s at %s, dialect %s%s\n", file.name.c_str(), report.link_name.c_str(),
        report.dialect.c_str(), report.identity.simulated ? " (SIMULATED)" : "");
    for (const IdentityValue& value : report.identity.values) {
        say("  %-12s 0x%X\n", value.name.c_str(), value.value);
    }
    std::size_t right = 0;
    for (const ScratchTrial& trial : report.trials) right += trial.right() ? 1 : 0;
    say("scratch %s: %zu of %zu values read back as written%s\n", report.scratch.text().c_str(),
        right, report.trials.size(), report.scratch_put_back ? ", first value put back" : "");
    for (const ScratchTrial& trial : report.trials) {
        if (!trial.right()) say("  wrote 0x%08X, read 0x%08X\n", trial.written, trial.read);
    }
    say("link: %llu frames, %llu bad here, %u bad at the board, %llu retries, %llu resets\n",
        static_cast<unsigned long long>(report.link.frames),
        static_cast<unsigned long long>(report.link.bad_frames), report.link.board_bad_frames,
        static_cast<unsigned long long>(report.link.retries),
        static_cast<unsigned long long>(report.link.resets));
    say("round trips: %llu, mean %.3f ms, longest %.3f ms\n",
        static_cast<unsigned long long>(report.round_trips.count()),
        milliseconds(report.round_trips.mean()), milliseconds(report.round_trips.longest()));
    const auto& bins = report.round_trips.bins();
    const std::uint64_t most =
        std::max<std::uint64_t>(1, *std::max_element(bins.begin(), bins.end()));
    for (std::size_t bin = 0; bin < bins.size(); ++bin) {
        if (bins[bin] == 0) continue;
        const std::string bar(std::max<std::size_t>(1, 40 * bins[bin] / most), '#');
        say("  up to %9.3f ms %6llu %s\n", bin_end_ms(bin),
            static_cast<unsigned long long>(bins[bin]), bar.c_str());
    }
    if (!pending.empty()) {
        print("codes of an earlier run wait to be restored: " + pending +
              "\n  `lanewright tune` or `lanewright apply` on this board writes them first\n");
    }
    print(report.good() && pending.empty() ? "good\n" : "NOT GOOD\n");
}

}  // namespace

int run_check(const CheckOptions& options) {
    if (options.measure) return run_measure(options);
    auto at_hand = take_board(options.board_path, options.link);
    if (!at_hand) return report(at_hand.error(), options.json);
    auto note = read_note(at_hand->endpoint.note_path());
    if (!note) return report(note.error(), options.json);
    const std::string pending = *note ? at_hand->endpoint.note_path() : std::string();
    boost::asio::io_context io;
    SteadyTimeSource time(io);
    auto checked = run_until_done(time, check_at_hand(&*at_hand, &time));
    if (!checked) return report(checked.error(), options.json);
    if (options.json) {
        print(report_json(*checked, at_hand->file, pending).dump(2) + "\n");
    } else {
        print_report(*checked, at_hand->file, pending);
    }
    if (!pending.empty()) return exit_try_again;
    return checked->good() ? exit_ok : exit_unreachable;
}

}  // namespace lanewright
