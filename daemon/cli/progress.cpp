#include "daemon/cli/progress.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>

#include "adapt/search/score.hpp"
#include "daemon/cli/log.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/engine/preflight.hpp"
#include "daemon/views/run_text.hpp"

namespace lanewright {

namespace {

constexpr std::size_t columns = 79;  // a full 80th column makes some terminals wrap
constexpr auto between_draws = std::chrono::milliseconds(100);

// Strategies say why they read in a sentence; its first words name the phase.
std::string short_phase(const std::string& why) {
    const std::string phase = why.substr(0, why.find(':'));
    return phase.size() <= 20 ? phase : phase.substr(0, 20);
}

}  // namespace

Progress::Progress(ProgressPlan plan, bool terminal) : plan_(std::move(plan)), terminal_(terminal) {
    for (const std::uint16_t lane : plan_.lanes) lines_[lane];
}

void Progress::on_event(const StoredEvent& event) noexcept {
    try {
        take(event);
    } catch (...) {
        // A progress line is never worth a run.
        terminal_ = false;
    }
}

void Progress::take(const StoredEvent& stored) {
    if (const auto* item = std::get_if<PreflightItem>(&stored.event)) tell(*item);
    const std::optional<Lane> lane = lane_of(stored.event);
    if (!lane || lines_.find(number(*lane)) == lines_.end()) return;
    LaneLine& line = lines_[number(*lane)];
    if (const auto* intent = std::get_if<Intent>(&stored.event)) {
        line.phase =
            intent->stage == Stage::compare ? "before/after" : short_phase(intent->request.why);
        line.side = intent->stage == Stage::preflight || intent->stage == Stage::reference;
    } else if (const auto* taken = std::get_if<ReadingTaken>(&stored.event)) {
        line.bench_s += taken->reading.cost_s;
        if (line.side) return draw_if_terminal();
        const double score = score_of(taken->reading, plan_.required).value;
        if (std::isfinite(score))
            line.best_score = std::max(score, line.best_score.value_or(score));
        ++line.reading_count;
        if (line.phase != "before/after") line.search_s += taken->reading.cost_s;
    } else if (const auto* empty = std::get_if<ReadingVoid>(&stored.event)) {
        say(number(*lane), "void reading, taken anew: " + empty->cause);
    } else if (const auto* decided = std::get_if<LaneDecided>(&stored.event)) {
        line.phase = "decided";
        say(number(*lane), "decided after " + std::to_string(line.reading_count) +
                               (line.reading_count == 1 ? " reading: " : " readings: ") +
                               decided->decision.reason);
    } else if (const auto* finished = std::get_if<LaneFinished>(&stored.event)) {
        line.phase = name_of(finished->outcome);
        line.done = true;
        say(number(*lane),
            std::string(name_of(finished->outcome)) +
                (finished->outcome == LaneOutcome::failed ? ": " + finished->reason : ""));
    }
    draw_if_terminal();
}

// Quick items that pass are no news; what was measured is, and what did not pass.
void Progress::tell(const PreflightItem& item) const {
    const bool news =
        item.result != ItemResult::passed ||
        std::find(board_items().begin(), board_items().end(), item.name) != board_items().end();
    if (!news || !item.from.empty()) return;
    const std::string line =
        "preflight: " + item.name + " " + name_of(item.result) + ": " +
        (item.lane ? "lane " + std::to_string(number(*item.lane)) + ": " : std::string()) +
        item.found;
    log_note(line);
    if (!terminal_) std::fputs(wrapped(line, "").c_str(), stderr);
}

void Progress::draw_if_terminal() {
    if (terminal_) draw(false);
}

void Progress::say(std::uint16_t lane, const std::string& text) const {
    const std::string line = "lane " + std::to_string(lane) + ": " + text;
    log_note(line);
    if (!terminal_) std::fputs(wrapped(line, "").c_str(), stderr);
}

// Bench time that the budget still allows, as declared; the lanes run side by side.
std::string Progress::time_left(const LaneLine& line) const {
    if (line.done) return "";
    if (line.reading_count == 0 || (plan_.budget_readings <= 0 && plan_.budget_bench_s <= 0)) {
        return "?";
    }
    const double each =
        line.search_s > 0 ? line.search_s / static_cast<double>(line.reading_count) : 0;
    double left = plan_.budget_bench_s > 0 ? plan_.budget_bench_s - line.search_s : 1e9;
    if (plan_.budget_readings > 0) {
        left = std::min(left, plan_.budget_readings * each - line.search_s);
    }
    char text[32];
    std::snprintf(text, sizeof text, "<%.0f s left", std::ceil(std::max(left, 0.0)));
    return text;
}

std::string Progress::line_of(std::uint16_t lane, const LaneLine& line) const {
    char score[16] = "-";
    if (line.best_score) std::snprintf(score, sizeof score, "%.2f", *line.best_score);
    char text[160];
    std::snprintf(text, sizeof text, "lane %2u  %-20s best %5s %4zu readings %6.1f s  %s",
                  static_cast<unsigned>(lane), line.phase.c_str(), score, line.reading_count,
                  line.bench_s, time_left(line).c_str());
    return std::string(text).substr(0, columns);
}

void Progress::draw(bool now) {
    const auto at = std::chrono::steady_clock::now();
    if (!now && at - last_drawn_ < between_draws) return;
    last_drawn_ = at;
    std::string out;
    if (drawn_ > 0) out += "\033[" + std::to_string(drawn_) + "A";
    for (const auto& [lane, line] : lines_) out += "\r\033[K" + line_of(lane, line) + "\n";
    drawn_ = lines_.size();
    std::fputs(out.c_str(), stderr);
    std::fflush(stderr);
}

void Progress::interject(const std::string& text) {
    if (terminal_ && drawn_ > 0) {
        std::fprintf(stderr, "\033[%zuA\r\033[J", drawn_);
        drawn_ = 0;
    }
    print_error(text);
    if (terminal_ && last_drawn_ != std::chrono::steady_clock::time_point{}) draw(true);
}

void Progress::finish() {
    if (terminal_) draw(true);
}

}  // namespace lanewright
