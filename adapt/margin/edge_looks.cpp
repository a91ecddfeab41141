#include "adapt/margin/edge_looks.hpp"

#include <algorithm>
#include <cmath>

#include "adapt/stats/normal.hpp"

namespace lanewright {
namespace {

double q_of(const Seen& seen) {
    return normal_q((seen.errors + 1.0 / 3) / (seen.bits + 2.0 / 3));
}

}  // namespace

bool contradicts(const Seen& more, const Seen& fewer) {
    constexpr double times = 3, deviations = 5;
    if (!(more.bits > 0) || !(fewer.bits > 0) || fewer.at_least) return false;
    if (!(more.ratio() > times * fewer.ratio())) return false;
    const double pooled = (more.errors + fewer.errors) / (more.bits + fewer.bits);
    const double sigma =
        std::sqrt(pooled * (1 - std::min(pooled, 1.0)) * (1 / more.bits + 1 / fewer.bits));
    return more.ratio() - fewer.ratio() > deviations * sigma;
}

void EdgeLooks::add(const Seen& seen) {
    auto place = std::find_if(seen_.begin(), seen_.end(),
                              [&](const Seen& each) { return each.steps >= seen.steps; });
    if (place == seen_.end() || place->steps != seen.steps) {
        place = seen_.insert(place, seen);
    } else {
        const std::size_t looks = place->looks + seen.looks;
        if (contradicts(*place, seen)) {
            *place = seen;
        } else if (contradicts(seen, *place)) {
            // What was there stays.
        } else if (place->at_least == seen.at_least && !seen.at_least) {
            place->bits += seen.bits;
            place->errors += seen.errors;
        } else if (place->at_least && (!seen.at_least || seen.ratio() > place->ratio())) {
            *place = seen;
        }
        place->looks = looks;
    }
    place->q = q_of(*place);
}

const Seen* EdgeLooks::suspect() const {
    for (auto inner = seen_.begin(); inner != seen_.end(); ++inner) {
        if (inner->looks > 1) continue;
        const bool worse = std::any_of(
            inner + 1, seen_.end(), [&](const Seen& outer) { return contradicts(*inner, outer); });
        if (worse) return &*inner;
    }
    return nullptr;
}

const Seen* EdgeLooks::at(std::int32_t steps) const {
    for (const Seen& each : seen_) {
        if (each.steps == steps) return &each;
    }
    return nullptr;
}

}  // namespace lanewright
