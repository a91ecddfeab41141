#include "adapt/search/staged.hpp"

#include <algorithm>

#include "adapt/search/closed_scan.hpp"
#include "adapt/search/finalists.hpp"
#include "adapt/search/text.hpp"

namespace lanewright {
namespace {

constexpr std::size_t scan_batch = 4;
constexpr std::size_t longest_scan = 256;

}  // namespace

StagedSearch::StagedSearch(const LaneProblem& problem) : problem_(problem), ledger_(problem_) {
    if (problem_.space == nullptr) problem_.space = &no_space_;
    start_ = nearest_allowed(space(), problem_.present);
    total_room_ = ledger_.affordable();
}

std::size_t StagedSearch::search_room() const {
    const std::size_t share = finalist_share(total_room_);
    const std::size_t left = ledger_.affordable();
    return left > share ? left - share : 0;
}

std::vector<Request> StagedSearch::propose(Condition now) {
    if (pending_.empty()) {
        Plan next = plan();
        pending_ = std::move(next.batch);
        pending_why_ = std::move(next.why);
        phase_ = next.phase;
    }
    std::vector<Request> requests;
    requests.reserve(pending_.size());
    for (const auto& codes : pending_) {
        requests.push_back(ledger_.request(codes, now, pending_why_));
    }
    return requests;
}

void StagedSearch::observe(std::span<const Reading> readings) {
    const std::size_t count = std::min(readings.size(), pending_.size());
    for (std::size_t i = 0; i < count; ++i) ledger_.add(pending_[i], readings[i]);
    pending_.clear();
    const auto* first = ledger_.find(start_);
    const bool closed = first != nullptr && first->first.rank < 2;
    if (closed && scans_when_closed() && scan_order_.empty()) {
        scan_order_ = closed_scan(space(), start_, std::min(total_room_, longest_scan));
    }
}

StagedSearch::Plan StagedSearch::plan() const {
    if (start_.value.empty()) return {{}, {}, "finished", false};
    if (!ledger_.was_read(start_)) {
        if (ledger_.affordable() == 0) return {{}, {}, "finished", true};
        return {{start_},
                start_ == problem_.present ? "present codes" : "nearest allowed codes",
                "present",
                false};
    }
    const Scan scanned = scan();
    if (!scanned.batch.empty()) return trimmed(scanned.batch, "closed eye: scan", "scan");
    if (!scanned.start) return finals(false);
    Question question = search(*scanned.start);
    if (question.wanted.empty()) return finals(false);
    if (question.settled && search_room() == 0) return finals(false);
    return trimmed(std::move(question.wanted), std::move(question.why), "search");
}

// What of a batch the search may still afford; with nothing left it is the finalists' turn.
StagedSearch::Plan StagedSearch::trimmed(std::vector<Codes> wanted, std::string why,
                                         std::string_view phase) const {
    const std::size_t room = search_room();
    if (room == 0) return finals(true);
    if (wanted.size() > room) wanted.resize(room);
    return {std::move(wanted), std::move(why), phase, false};
}

StagedSearch::Plan StagedSearch::finals(bool cut_short) const {
    auto batch = next_finalists(problem_, ledger_, finalist_share(total_room_));
    const std::size_t room = ledger_.affordable();
    if (batch.size() > room) batch.resize(room);
    const std::string_view phase = batch.empty() ? "finished" : "finalists";
    return {std::move(batch), "finalist, read again", phase, cut_short};
}

// Goes through the scan's order over what was read, as far as the scan itself went: it ends with
// the first batch that holds an open eye. At half of the budget it also ends where closed eyes
// give a slope; with none, a descent would be blind and the scan goes on.
StagedSearch::Scan StagedSearch::scan() const {
    Scan result;
    result.start = start_;
    Merit best = ledger_.find(start_)->first;
    if (best.rank == 2 || !scans_when_closed()) return result;
    result.used = true;
    const std::size_t half = std::max(total_room_ / 2, scan_batch);
    for (std::size_t i = 0; i < scan_order_.size(); i += scan_batch) {
        if (best.rank == 2 || (i >= half && gives_slope(best))) return result;
        const std::size_t end = std::min(i + scan_batch, scan_order_.size());
        for (std::size_t j = i; j < end; ++j) {
            const auto* entry = ledger_.find(scan_order_[j]);
            if (entry == nullptr) {
                result.batch.push_back(scan_order_[j]);
            } else if (entry->first > best) {
                best = entry->first;
                result.start = scan_order_[j];
            }
        }
        result.looked_at = end;
        if (!result.batch.empty()) return result;
    }
    if (best.rank < 2 && !gives_slope(best)) result.start.reset();
    return result;
}

Decision StagedSearch::conclude() const {
    const Choice choice = choose(problem_, ledger_);
    Decision decision;
    decision.codes = choice.codes;
    decision.unchanged = choice.unchanged;
    decision.reason = choice.reason;
    decision.reading_count = ledger_.reading_count();
    decision.standard_readings = ledger_.standard_readings();
    decision.bench_s = ledger_.bench_s();
    decision.notes = notes(choice.codes);
    return decision;
}

std::vector<std::string> StagedSearch::notes(const Codes& decided) const {
    std::vector<std::string> notes = search_notes();
    if (start_.value.empty()) {
        notes.push_back("the code space holds no allowed codes that could be read");
        return notes;
    }
    if (start_ != problem_.present) {
        notes.push_back("the present codes " + text_of(space(), problem_.present) +
                        " are outside the allowed codes: the search began at " +
                        text_of(space(), start_));
    }
    const Plan next = plan();
    if (next.cut_short) {
        notes.push_back("the budget ended the search before it was through");
    } else if (!next.batch.empty()) {
        notes.push_back("decided before the search was through");
    }
    if (!ledger_.was_read(start_)) return notes;
    if (const Scan scanned = scan(); scanned.used) {
        const auto end = scan_order_.begin() + static_cast<std::ptrdiff_t>(scanned.looked_at);
        const auto count = std::count_if(
            scan_order_.begin(), end, [&](const Codes& codes) { return ledger_.was_read(codes); });
        notes.push_back(scan_note("the eye was closed at the start", count));
    }
    if (ledger_.asked_differently() > 0) {
        notes.push_back(std::to_string(ledger_.asked_differently()) +
                        " times other codes were read back than asked for; those read back count");
    }
    const auto* entry = ledger_.find(decided);
    if (entry != nullptr && entry->readings.front().status == Status::saturated) {
        notes.push_back("the eye reaches beyond the monitor's range: wider ones look the same");
    }
    for (std::size_t i = 0; i < space().dimensions().size() && i < decided.value.size(); ++i) {
        const auto& dimension = space().dimensions()[i];
        if (dimension.lowest == dimension.highest) continue;
        if (decided.value[i] == dimension.lowest || decided.value[i] == dimension.highest) {
            notes.push_back(dimension.name + " is at the " +
                            (decided.value[i] == dimension.lowest ? "lower" : "upper") +
                            " end of its range (" + std::to_string(decided.value[i]) + ")");
        }
    }
    return notes;
}

Lesson StagedSearch::lesson() const {
    return {problem_.lane, {}};
}

}  // namespace lanewright
