#include "adapt/search/closed_scan.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>
#include <set>

#include "adapt/search/response.hpp"

namespace lanewright {
namespace {

constexpr std::uint64_t most_codes_looked_at = std::uint64_t{1} << 22;
constexpr std::size_t points_for_each_code_wanted = 16;

// The digits of `index` in that base, mirrored behind the point.
double radical_inverse(std::uint64_t index, std::uint64_t base) {
    double value = 0;
    double place = 1.0 / static_cast<double>(base);
    for (; index > 0; index /= base) {
        value += static_cast<double>(index % base) * place;
        place /= static_cast<double>(base);
    }
    return value;
}

std::uint64_t nth_prime(std::size_t n) {
    std::uint64_t candidate = 2;
    for (;; ++candidate) {
        bool prime = true;
        for (std::uint64_t factor = 2; factor * factor <= candidate; ++factor) {
            prime = prime && candidate % factor != 0;
        }
        if (prime && n-- == 0) return candidate;
    }
}

Codes halton_codes(const CodeSpace& space, std::uint64_t index,
                   const std::vector<std::uint64_t>& bases) {
    Codes codes;
    for (std::size_t i = 0; i < bases.size(); ++i) {
        const auto& dimension = space.dimensions()[i];
        const double count = static_cast<double>(dimension.highest) - dimension.lowest + 1;
        const double offset = std::floor(radical_inverse(index, bases[i]) * count);
        codes.value.push_back(
            static_cast<std::int32_t>(dimension.lowest + std::min(offset, count - 1)));
    }
    return codes;
}

bool peaks(const CodeSpace& space, const Codes& codes) {
    const auto response = response_of(space, codes);
    return !response || response->peaking_db > 0;
}

// Allowed codes in the order of the sequence, each once.
std::vector<Codes> spread_codes(const CodeSpace& space, const Codes& present, std::size_t points) {
    std::vector<std::uint64_t> bases;
    for (std::size_t i = 0; i < space.dimensions().size(); ++i) bases.push_back(nth_prime(i));
    std::vector<Codes> spread;
    std::set<Codes> seen{present};
    for (std::uint64_t index = 1; index <= points; ++index) {
        const Codes codes = halton_codes(space, index, bases);
        if (space.allows(codes) && seen.insert(codes).second) spread.push_back(codes);
    }
    // A small space, or one with little allowed: what the sequence missed, in order.
    if (space.size() <= points || spread.empty()) {
        const std::uint64_t end = std::min(space.size(), most_codes_looked_at);
        for (std::uint64_t index = 0; index < end; ++index) {
            const Codes codes = space.at(index);
            if (space.allows(codes) && seen.insert(codes).second) spread.push_back(codes);
            if (spread.size() >= points) break;
        }
    }
    return spread;
}

}  // namespace

std::vector<Codes> closed_scan(const CodeSpace& space, const Codes& present, std::size_t count) {
    if (space.size() == 0 || count == 0) return {};
    auto spread = spread_codes(space, present, count * points_for_each_code_wanted);
    std::stable_partition(spread.begin(), spread.end(),
                          [&](const Codes& codes) { return peaks(space, codes); });
    if (spread.size() > count) spread.resize(count);
    return spread;
}

Codes nearest_allowed(const CodeSpace& space, const Codes& codes) {
    if (space.allows(codes)) return codes;
    Codes best;
    double best_distance = std::numeric_limits<double>::infinity();
    const std::uint64_t end = std::min(space.size(), most_codes_looked_at);
    for (std::uint64_t index = 0; index < end; ++index) {
        Codes candidate = space.at(index);
        double distance = 0;
        for (std::size_t i = 0; i < candidate.value.size() && i < codes.value.size(); ++i) {
            const auto& dimension = space.dimensions()[i];
            const double range =
                std::max(1.0, static_cast<double>(dimension.highest) - dimension.lowest);
            distance += std::abs(static_cast<double>(candidate.value[i]) - codes.value[i]) / range;
        }
        if (distance < best_distance && space.allows(candidate)) {
            best_distance = distance;
            best = std::move(candidate);
        }
    }
    return best;
}

std::string scan_note(const std::string& closed, std::ptrdiff_t count) {
    if (count <= 0) return closed + ", and the search ended before other codes were tried";
    return closed + ": " + std::to_string(count) + (count == 1 ? " code" : " codes") +
           " spread over the space " + (count == 1 ? "was" : "were") +
           " read to find one that opens it";
}

}  // namespace lanewright
