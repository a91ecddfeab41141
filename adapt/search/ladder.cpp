#include "adapt/search/ladder.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <optional>
#include <string>
#include <utility>

#include "adapt/search/closed_scan.hpp"
#include "adapt/search/moves.hpp"
#include "adapt/search/response.hpp"
#include "adapt/search/staged.hpp"

namespace lanewright {
namespace {

constexpr std::uint64_t most_codes_looked_at = std::uint64_t{1} << 20;
constexpr std::size_t coarse_stride =
    3;  // rungs skipped at first; the best one's neighbours follow
constexpr std::size_t spread_batch = 4;
constexpr std::size_t most_spread = 64;

struct Candidate {
    std::uint64_t index = 0;
    double peaking_db = 0;
    double penalty = 0;  // in squared rungs, roughly
};

double octaves(double ratio) {
    return std::log2(ratio);
}

// Every allowed code's peaking, and how well it suits a rung of that peaking.
std::vector<Candidate> candidates_of(const CodeSpace& space, double bit_rate_hz) {
    std::vector<Candidate> candidates;
    const std::uint64_t stride = std::max<std::uint64_t>(space.size() / most_codes_looked_at, 1);
    std::vector<double> levels;
    for (std::uint64_t index = 0; index < space.size(); index += stride) {
        const Codes codes = space.at(index);
        const auto response = space.allows(codes) ? response_of(space, codes) : std::nullopt;
        if (!response) continue;
        const double pole = octaves(response->pole_ghz * 1e9 / (0.5 * bit_rate_hz));
        const double loss = response->hf_db / 3.0;
        candidates.push_back({index, response->peaking_db, pole * pole + loss * loss});
        levels.push_back(octaves(response->level_ohm));
    }
    if (levels.empty()) return candidates;
    const auto [least, most] = std::minmax_element(levels.begin(), levels.end());
    const double middle = 0.5 * (*least + *most);
    for (std::size_t i = 0; i < candidates.size(); ++i) {
        const double away = (levels[i] - middle) / 2.0;
        candidates[i].penalty += away * away;
    }
    return candidates;
}

const Candidate* best_for(const std::vector<Candidate>& candidates, double peaking_db,
                          double rung_db) {
    const Candidate* best = nullptr;
    double least = std::numeric_limits<double>::infinity();
    for (const Candidate& each : candidates) {
        const double away = (each.peaking_db - peaking_db) / std::max(0.25 * rung_db, 1e-6);
        const double cost = away * away + each.penalty;
        if (cost >= least) continue;
        least = cost;
        best = &each;
    }
    return best;
}

// Only the smallest steps of other moves.
class SmallestMoves : public Moves {
  public:
    explicit SmallestMoves(std::unique_ptr<Moves> moves) : moves_(std::move(moves)) {}
    std::size_t axes() const override { return moves_->axes(); }
    std::size_t levels() const override { return 1; }
    std::string axis_name(std::size_t axis) const override { return moves_->axis_name(axis); }
    std::optional<Codes> step(const Codes& from, std::size_t axis, int direction,
                              std::size_t) const override {
        return moves_->step(from, axis, direction, moves_->levels() - 1);
    }

  private:
    std::unique_ptr<Moves> moves_;
};

class Ladder : public StagedSearch {
  public:
    explicit Ladder(const LaneProblem& problem)
        : StagedSearch(problem),
          moves_(make_code_moves(space())),
          pairs_(make_pair_moves(space())),
          rungs_(peaking_ladder(space(), problem.cost.bit_rate_hz)),
          spread_(closed_scan(space(), problem.present, most_spread)) {
        without_tables_ = rungs_.empty();
        if (without_tables_) {
            rungs_.assign(spread_.begin(), spread_.begin() + static_cast<std::ptrdiff_t>(std::min(
                                                                 spread_.size(), ladder_rungs)));
        }
    }

  protected:
    bool scans_when_closed() const override { return false; }

    Question search(const Codes& start) const override {
        Question question = unread_rungs();
        if (!question.wanted.empty()) return question;
        const Codes best = best_seen(start);
        if (ledger().find(best)->first.rank < 2) {
            question = unread_spread();
            if (!question.wanted.empty()) return question;
        }
        return descend(space(), moves_, pairs_, ledger(), best);
    }

    std::vector<std::string> search_notes() const override {
        std::vector<std::string> notes;
        const auto count = std::count_if(spread_.begin(), spread_.end(), [&](const Codes& codes) {
            return ledger().was_read(codes);
        });
        if (scanned()) {
            notes.push_back(scan_note("the eye was closed at the start and on every rung", count));
        }
        if (!without_tables_) return notes;
        notes.push_back(
            "the element tables of the four banks are not all known: the ladder's rungs are codes "
            "spread over the space, not ordered by peaking");
        return notes;
    }

  private:
    // Every third rung first, then those around the best of these: past the best rung, more
    // peaking only makes it worse. A ladder that shows no opening is read whole.
    Question unread_rungs() const {
        Question question;
        question.why = "rung of the ladder";
        const auto want = [&](std::size_t rung) {
            if (!ledger().was_read(rungs_[rung])) question.wanted.push_back(rungs_[rung]);
        };
        for (std::size_t i = 0; i < rungs_.size(); i += coarse_stride) want(i);
        if (!question.wanted.empty() || rungs_.empty()) return question;
        std::size_t best = 0;
        for (std::size_t i = 0; i < rungs_.size(); i += coarse_stride) {
            if (first(rungs_[i]) > first(rungs_[best])) best = i;
        }
        const bool closed = without_tables_ || first(rungs_[best]).rank < 2;
        const std::size_t reach = closed ? rungs_.size() : coarse_stride - 1;
        for (std::size_t i = best > reach ? best - reach : 0;
             i < rungs_.size() && i <= best + reach; ++i) {
            want(i);
        }
        return question;
    }

    // Where no rung opens the eye: codes spread over the space, until one does.
    Question unread_spread() const {
        Question question;
        question.why = "closed eye: scan";
        for (const Codes& codes : spread_) {
            if (ledger().was_read(codes)) continue;
            question.wanted.push_back(codes);
            if (question.wanted.size() == spread_batch) break;
        }
        return question;
    }

    // Of the start, the rungs and the scan: not of the descent's own steps, which begins there.
    Codes best_seen(const Codes& start) const {
        Codes best = start;
        for (const auto* list : {&rungs_, &spread_}) {
            for (const Codes& codes : *list) {
                if (ledger().was_read(codes) && first(codes) > first(best)) best = codes;
            }
        }
        return best;
    }

    bool scanned() const {
        return !rungs_.empty() && std::all_of(rungs_.begin(), rungs_.end(), [&](const auto& codes) {
            return ledger().was_read(codes) && first(codes).rank < 2;
        });
    }

    Merit first(const Codes& codes) const { return ledger().find(codes)->first; }

    SmallestMoves moves_, pairs_;
    std::vector<Codes> rungs_, spread_;
    bool without_tables_ = false;
};

}  // namespace

std::vector<Codes> peaking_ladder(const CodeSpace& space, double bit_rate_hz, std::size_t rungs) {
    const auto candidates = candidates_of(space, bit_rate_hz);
    if (candidates.empty() || rungs == 0 || !(bit_rate_hz > 0)) return {};
    const auto [least, most] = std::minmax_element(
        candidates.begin(), candidates.end(),
        [](const Candidate& a, const Candidate& b) { return a.peaking_db < b.peaking_db; });
    // Codes that don't peak are no rungs, as far as others do.
    const double low = std::min(std::max(least->peaking_db, 0.0), most->peaking_db);
    const double rung_db =
        rungs > 1 ? (most->peaking_db - low) / static_cast<double>(rungs - 1) : 0.0;
    std::vector<Codes> ladder;
    for (std::size_t i = 0; i < rungs; ++i) {
        const auto* best =
            best_for(candidates, low + static_cast<double>(i) * rung_db, std::max(rung_db, 1e-3));
        Codes codes = space.at(best->index);
        if (std::find(ladder.begin(), ladder.end(), codes) == ladder.end()) {
            ladder.push_back(std::move(codes));
        }
    }
    return ladder;
}

std::unique_ptr<Procedure> make_ladder(const LaneProblem& problem, std::span<const Lesson>,
                                       RandomKey) {
    return std::make_unique<Ladder>(problem);
}

}  // namespace lanewright
