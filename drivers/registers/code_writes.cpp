// Writing all codes of a lane: limits, forbidden combinations, and on chips whose codes take
// effect one by one an order that passes none of them.

#include <algorithm>
#include <string>
#include <utility>

#include "drivers/registers/register_map.hpp"

namespace lanewright {

namespace {

// So many dimensions can change at once on a chip without a strobe: the orders are searched over
// the subsets already written.
constexpr std::size_t most_unstrobed = 12;

std::string text_of(const std::vector<std::string>& names, const std::vector<std::int32_t>& codes) {
    std::string out;
    for (std::size_t i = 0; i < codes.size(); ++i) {
        if (i > 0) out += ",";
        out += names[i] + "=" + std::to_string(codes[i]);
    }
    return out;
}

}  // namespace

void RegisterMap::note_forbidden(const BoardFile& board) {
    for (const ForbiddenCombination& combination : board.forbidden) {
        Combination known;
        known.why = combination.why;
        for (const ForbiddenRange& range : combination.all_of) {
            const auto at =
                std::find(dimension_names_.begin(), dimension_names_.end(), range.dimension);
            if (at == dimension_names_.end()) continue;
            known.all_of.push_back({static_cast<std::size_t>(at - dimension_names_.begin()),
                                    range.lowest, range.highest});
        }
        if (!known.all_of.empty()) forbidden_.push_back(std::move(known));
    }
}

const RegisterMap::Combination* RegisterMap::forbidding(
    const std::vector<std::int32_t>& codes) const {
    const auto holds = [&codes](const Range& range) {
        return codes[range.dimension] >= range.lowest && codes[range.dimension] <= range.highest;
    };
    for (const Combination& combination : forbidden_) {
        if (std::all_of(combination.all_of.begin(), combination.all_of.end(), holds)) {
            return &combination;
        }
    }
    return nullptr;
}

Result<void> RegisterMap::check_codes(Lane lane, const Codes& codes) const {
    if (codes.value.size() != dimensions_.size()) {
        return not_allowed("expected one code for each of " + std::to_string(dimensions_.size()) +
                               " dimensions, found " + std::to_string(codes.value.size()),
                           {}, lane);
    }
    for (std::size_t i = 0; i < dimensions_.size(); ++i) {
        const Result<FieldPlace> at = place(lane, dimensions_[i]);
        if (!at) return at.error();
        const FieldDescription& field = *find(dimensions_[i]);
        if (field.role != Role::tuned || field.access == Access::read_only) {
            return not_allowed(dimensions_[i].text() + " may not be tuned: its role is another",
                               dimensions_[i].text(), lane);
        }
        const Result<void> limits = check_limits(lane, dimensions_[i], field, codes.value[i]);
        if (!limits) return limits;
    }
    if (const Combination* hit = forbidding(codes.value)) {
        return not_allowed("the board file forbids " + text_of(dimension_names_, codes.value) +
                               (hit->why.empty() ? "" : ": " + hit->why),
                           dimensions_[hit->all_of.front().dimension].text(), lane);
    }
    return {};
}

Result<std::vector<std::size_t>> RegisterMap::order_of_writes(Lane lane, const Codes& standing,
                                                              const Codes& wanted) const {
    std::vector<std::size_t> changed, order;
    for (std::size_t i = 0; i < dimensions_.size(); ++i) {
        (standing.value[i] == wanted.value[i] ? order : changed).push_back(i);
    }
    if (changed.size() > most_unstrobed) {
        return not_allowed("more than " + std::to_string(most_unstrobed) +
                               " dimensions change at once on a chip without a strobe",
                           {}, lane);
    }
    // reached_by[s]: the dimension last written on an allowed way to the subset s of the changed
    // ones; the first way found is the one nearest to the board file's order.
    const std::size_t all = (std::size_t{1} << changed.size()) - 1;
    constexpr std::size_t not_reached = static_cast<std::size_t>(-1);
    std::vector<std::size_t> reached_by(all + 1, not_reached);
    reached_by[0] = 0;
    for (std::size_t subset = 0; subset < all; ++subset) {
        if (reached_by[subset] == not_reached) continue;
        for (std::size_t k = 0; k < changed.size(); ++k) {
            const std::size_t next = subset | (std::size_t{1} << k);
            if (next == subset || reached_by[next] != not_reached) continue;
            std::vector<std::int32_t> codes = standing.value;
            for (std::size_t j = 0; j < changed.size(); ++j) {
                if ((next >> j & 1) != 0) codes[changed[j]] = wanted.value[changed[j]];
            }
            if (forbidding(codes) == nullptr) reached_by[next] = k;
        }
    }
    if (all > 0 && reached_by[all] == not_reached) {
        return not_allowed(
            "every order of writes from " + text_of(dimension_names_, standing.value) + " to " +
                text_of(dimension_names_, wanted.value) + " passes a forbidden combination",
            {}, lane);
    }
    std::vector<std::size_t> backwards;
    for (std::size_t subset = all; subset != 0;) {
        backwards.push_back(changed[reached_by[subset]]);
        subset &= ~(std::size_t{1} << reached_by[subset]);
    }
    order.insert(order.end(), backwards.rbegin(), backwards.rend());
    return order;
}

Result<void> RegisterMap::write_codes(Batch& batch, Lane lane, const Codes& wanted,
                                      const std::optional<Codes>& standing) const {
    if (const Result<void> allowed = check_codes(lane, wanted); !allowed) return allowed;
    std::vector<std::size_t> order(dimensions_.size());
    for (std::size_t i = 0; i < order.size(); ++i) order[i] = i;
    if (!strobe_) {
        if (!standing || standing->value.size() != dimensions_.size()) {
            return not_allowed(
                "the codes that stand must be known before a chip without a strobe is written", {},
                lane);
        }
        Result<std::vector<std::size_t>> found = order_of_writes(lane, *standing, wanted);
        if (!found) return found.error();
        order = std::move(*found);
    }
    for (const std::size_t i : order) {
        const Result<FieldPlace> at = place(lane, dimensions_[i]);
        if (!at) return at.error();
        add_write(batch, *at, *find(dimensions_[i]), static_cast<std::uint32_t>(wanted.value[i]));
    }
    return {};
}

}  // namespace lanewright
