#include "adapt/search/descent.hpp"

#include <algorithm>
#include <optional>

#include "adapt/search/staged.hpp"

namespace lanewright {
namespace {

// As far again as the last sweep went, ended at the ranges; empty where that is not allowed.
std::optional<Codes> pattern_codes(const CodeSpace& space, const Codes& before, const Codes& now) {
    Codes codes = now;
    for (std::size_t i = 0; i < codes.value.size(); ++i) {
        const auto& dimension = space.dimensions()[i];
        const std::int64_t wanted = 2 * std::int64_t{now.value[i]} - before.value[i];
        codes.value[i] = static_cast<std::int32_t>(
            std::clamp<std::int64_t>(wanted, dimension.lowest, dimension.highest));
    }
    if (codes == now || codes_changed(before, now) < 2 || !space.allows(codes)) return std::nullopt;
    return codes;
}

class Descent {
  public:
    Descent(const CodeSpace& space, const Moves& moves, const Moves& oblique, const Ledger& ledger,
            Codes start)
        : space_(space),
          moves_(moves),
          oblique_(oblique),
          ledger_(ledger),
          here_(std::move(start)) {}

    Question run() {
        std::size_t level = 0;
        for (;;) {
            if (!descend_from(level)) return question_;
            question_.settled = true;
            const Codes before = here_;
            if (!try_oblique()) return question_;
            if (here_ == before) return {};
            level = moves_.levels() - 1;
        }
    }

  private:
    bool better(const Codes& candidate) const {
        const auto* there = ledger_.find(candidate);
        const auto* now = ledger_.find(here_);
        return there != nullptr && (now == nullptr || there->first > now->first);
    }

    // All of these return false where a reading is missing.

    bool descend_from(std::size_t level) {
        while (level < moves_.levels()) {
            const Codes before = here_;
            for (std::size_t axis = 0; axis < moves_.axes(); ++axis) {
                if (!try_axis(moves_, axis, level)) return false;
            }
            if (here_ == before) {
                ++level;
            } else if (!try_pattern(before)) {
                return false;
            }
        }
        return true;
    }

    // Until one of them leads on. The last axis comes first: it is the impedance level, along
    // which a ridge runs where only the response counts.
    bool try_oblique() {
        const Codes before = here_;
        for (std::size_t level = 1; level < oblique_.levels(); ++level) {
            for (std::size_t axis = oblique_.axes(); axis-- > 0;) {
                if (!try_axis(oblique_, axis, level)) return false;
                if (here_ != before) return true;
            }
        }
        return true;
    }

    // Both neighbours are asked for at once, so that a board can take them back to back.
    bool try_axis(const Moves& moves, std::size_t axis, std::size_t level) {
        std::vector<Codes> neighbours;
        for (const int direction : {+1, -1}) {
            auto codes = moves.step(here_, axis, direction, level);
            if (codes &&
                std::find(neighbours.begin(), neighbours.end(), *codes) == neighbours.end()) {
                neighbours.push_back(std::move(*codes));
            }
        }
        if (missing(neighbours, "step along " + moves.axis_name(axis))) return false;
        for (const auto& codes : neighbours) {
            if (better(codes)) here_ = codes;
        }
        return true;
    }

    // Kept only where it is better by itself; no exploring around a pattern move that is not.
    bool try_pattern(const Codes& before) {
        const auto codes = pattern_codes(space_, before, here_);
        if (!codes) return true;
        if (missing({*codes}, "pattern move")) return false;
        if (better(*codes)) here_ = *codes;
        return true;
    }

    bool missing(const std::vector<Codes>& codes, std::string why) {
        for (const auto& each : codes) {
            if (!ledger_.was_read(each)) question_.wanted.push_back(each);
        }
        question_.why = std::move(why);
        return !question_.wanted.empty();
    }

    const CodeSpace& space_;
    const Moves& moves_;
    const Moves& oblique_;
    const Ledger& ledger_;
    Codes here_;
    Question question_;
};

class DescentSearch : public StagedSearch {
  public:
    DescentSearch(const LaneProblem& problem, bool along_response) : StagedSearch(problem) {
        moves_ = make_code_moves(space());
        oblique_ = make_response_moves(space());
        fell_back_ = along_response && !oblique_;
        if (along_response && oblique_) std::swap(moves_, oblique_);
        if (!oblique_) oblique_ = make_pair_moves(space());
    }

  protected:
    Question search(const Codes& start) const override {
        return descend(space(), *moves_, *oblique_, ledger(), start);
    }

    std::vector<std::string> search_notes() const override {
        if (!fell_back_) return {};
        return {
            "the element tables of the four banks are not all known: raw codes were stepped "
            "instead of the response"};
    }

  private:
    std::unique_ptr<Moves> moves_, oblique_;
    bool fell_back_ = false;
};

}  // namespace

Question descend(const CodeSpace& space, const Moves& moves, const Moves& oblique,
                 const Ledger& ledger, Codes start) {
    return Descent(space, moves, oblique, ledger, std::move(start)).run();
}

std::unique_ptr<Procedure> make_descent(const LaneProblem& problem, std::span<const Lesson>,
                                        RandomKey) {
    return std::make_unique<DescentSearch>(problem, false);
}

std::unique_ptr<Procedure> make_descent_axes(const LaneProblem& problem, std::span<const Lesson>,
                                             RandomKey) {
    return std::make_unique<DescentSearch>(problem, true);
}

}  // namespace lanewright
