#include "adapt/search/exhaustive.hpp"

#include <algorithm>
#include <limits>

#include "adapt/search/finalists.hpp"
#include "adapt/search/staged.hpp"

namespace lanewright {
namespace {

constexpr std::size_t batch_size = 8;

std::vector<std::uint64_t> points_by_stride(const CodeSpace& space, std::uint32_t stride) {
    std::vector<std::uint64_t> points;
    for (const auto& dimension : space.dimensions()) {
        const auto count = static_cast<std::uint64_t>(
            std::max<std::int64_t>(std::int64_t{dimension.highest} - dimension.lowest + 1, 0));
        points.push_back((count + stride - 1) / stride);
    }
    return points;
}

std::uint64_t product_of(const std::vector<std::uint64_t>& factors) {
    if (factors.empty()) return 0;
    std::uint64_t product = 1;
    for (auto factor : factors) {
        if (factor != 0 && product > std::numeric_limits<std::uint64_t>::max() / factor) {
            return std::numeric_limits<std::uint64_t>::max();
        }
        product *= factor;
    }
    return product;
}

class Exhaustive : public StagedSearch {
  public:
    explicit Exhaustive(const LaneProblem& problem) : StagedSearch(problem) {
        // The present codes are read besides the grid, of which they may be no part.
        const std::uint64_t room = search_room();
        grid_ = make_grid(space(), problem.stride, room > 1 ? room - 1 : 1);
    }

  protected:
    bool scans_when_closed() const override { return false; }

    Question search(const Codes&) const override {
        Question question;
        question.why = "grid";
        // Codes once read stay read: the walk never has to begin anew.
        while (next_ < grid_.size() && passed(grid_.at(next_))) ++next_;
        for (std::uint64_t i = next_; i < grid_.size() && question.wanted.size() < batch_size;
             ++i) {
            Codes codes = grid_.at(i);
            if (!passed(codes)) question.wanted.push_back(std::move(codes));
        }
        return question;
    }

    std::vector<std::string> search_notes() const override {
        if (!grid_.thinned) return {};
        return {"the budget does not hold the whole grid: it was thinned to " +
                std::to_string(grid_.size()) + " of " + std::to_string(space().size()) +
                " codes, spread evenly"};
    }

  private:
    bool passed(const Codes& codes) const {
        return !space().allows(codes) || ledger().was_read(codes);
    }

    Grid grid_;
    mutable std::uint64_t next_ = 0;
};

}  // namespace

std::uint64_t Grid::size() const {
    std::vector<std::uint64_t> factors;
    for (const auto& each : codes) factors.push_back(each.size());
    return product_of(factors);
}

Codes Grid::at(std::uint64_t index) const {
    Codes point;
    point.value.resize(codes.size());
    for (std::size_t i = codes.size(); i-- > 0;) {
        const std::uint64_t count = std::max<std::uint64_t>(codes[i].size(), 1);
        if (!codes[i].empty()) point.value[i] = codes[i][index % count];
        index /= count;
    }
    return point;
}

Grid make_grid(const CodeSpace& space, std::uint32_t stride, std::uint64_t most) {
    stride = std::max<std::uint32_t>(stride, 1);
    auto points = points_by_stride(space, stride);
    Grid grid;
    // No bank has more codes than can be listed here; a wider dimension is thinned to this many.
    constexpr std::uint64_t most_codes_of_one = 1u << 16;
    for (auto& each : points) {
        if (each > most_codes_of_one) {
            each = most_codes_of_one;
            grid.thinned = true;
        }
    }
    while (product_of(points) > std::max<std::uint64_t>(most, 1)) {
        const auto widest = std::max_element(points.begin(), points.end());
        if (*widest <= 1) break;
        *widest -= 1;
        grid.thinned = true;
    }
    for (std::size_t i = 0; i < points.size(); ++i) {
        const auto& dimension = space.dimensions()[i];
        const std::int64_t count = std::int64_t{dimension.highest} - dimension.lowest + 1;
        const auto number = static_cast<std::int64_t>(points[i]);
        const std::int64_t margin =
            std::max<std::int64_t>(count - 1 - (number - 1) * stride, 0) / 2;
        auto& codes = grid.codes.emplace_back();
        for (std::int64_t k = 0; k < number; ++k) {
            const std::int64_t offset =
                grid.thinned ? (2 * k + 1) * count / (2 * number) : margin + k * stride;
            codes.push_back(static_cast<std::int32_t>(dimension.lowest + offset));
        }
    }
    return grid;
}

std::unique_ptr<Procedure> make_exhaustive(const LaneProblem& problem, std::span<const Lesson>,
                                           RandomKey) {
    return std::make_unique<Exhaustive>(problem);
}

}  // namespace lanewright
