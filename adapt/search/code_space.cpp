#include "adapt/search/code_space.hpp"

#include <algorithm>
#include <limits>

namespace lanewright {
namespace {

std::uint64_t count_of(const Dimension& dimension) {
    if (dimension.highest < dimension.lowest) return 0;
    return static_cast<std::uint64_t>(std::int64_t{dimension.highest} - dimension.lowest) + 1;
}

bool holds(const Forbidden& rule, const Codes& codes) {
    return !rule.all_of.empty() &&
           std::all_of(rule.all_of.begin(), rule.all_of.end(), [&](const Forbidden::Range& range) {
               return range.dimension < codes.value.size() &&
                      codes.value[range.dimension] >= range.lowest &&
                      codes.value[range.dimension] <= range.highest;
           });
}

}  // namespace

CodeSpace::CodeSpace(std::vector<Dimension> dimensions, std::vector<Forbidden> forbidden,
                     std::shared_ptr<const CodeList> list)
    : dimensions_(std::move(dimensions)),
      forbidden_(std::move(forbidden)),
      list_(std::move(list)) {}

bool CodeSpace::allows(const Codes& codes) const {
    if (codes.value.size() != dimensions_.size()) return false;
    for (std::size_t i = 0; i < dimensions_.size(); ++i) {
        const auto& dimension = dimensions_[i];
        if (codes.value[i] < dimension.lowest || codes.value[i] > dimension.highest) return false;
    }
    if (list_ && list_->codes.contains(codes) != list_->only) return false;
    return std::none_of(forbidden_.begin(), forbidden_.end(),
                        [&](const Forbidden& rule) { return holds(rule, codes); });
}

std::uint64_t CodeSpace::size() const {
    if (dimensions_.empty()) return 0;
    std::uint64_t product = 1;
    for (const auto& dimension : dimensions_) {
        const std::uint64_t count = count_of(dimension);
        if (count != 0 && product > std::numeric_limits<std::uint64_t>::max() / count) {
            return std::numeric_limits<std::uint64_t>::max();
        }
        product *= count;
    }
    return product;
}

std::uint64_t CodeSpace::index_of(const Codes& codes) const {
    std::uint64_t index = 0;
    for (std::size_t i = 0; i < dimensions_.size() && i < codes.value.size(); ++i) {
        const std::int64_t offset = std::int64_t{codes.value[i]} - dimensions_[i].lowest;
        index = index * count_of(dimensions_[i]) + static_cast<std::uint64_t>(offset);
    }
    return index;
}

Codes CodeSpace::at(std::uint64_t index) const {
    Codes codes;
    codes.value.resize(dimensions_.size());
    for (std::size_t i = dimensions_.size(); i-- > 0;) {
        const std::uint64_t count = std::max<std::uint64_t>(count_of(dimensions_[i]), 1);
        codes.value[i] = static_cast<std::int32_t>(dimensions_[i].lowest +
                                                   static_cast<std::int64_t>(index % count));
        index /= count;
    }
    return codes;
}

std::optional<double> CodeSpace::nominal(std::size_t dimension, std::int32_t code) const {
    if (dimension >= dimensions_.size()) return std::nullopt;
    const auto& found = dimensions_[dimension];
    const std::int64_t position = std::int64_t{code} - found.lowest;
    if (position < 0 || position >= static_cast<std::int64_t>(found.nominal.size())) {
        return std::nullopt;
    }
    return found.nominal[static_cast<std::size_t>(position)];
}

std::optional<std::size_t> CodeSpace::find(Part part) const {
    const auto found = std::find_if(dimensions_.begin(), dimensions_.end(),
                                    [&](const Dimension& each) { return each.part == part; });
    if (found == dimensions_.end()) return std::nullopt;
    return static_cast<std::size_t>(found - dimensions_.begin());
}

}  // namespace lanewright
