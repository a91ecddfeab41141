#include <algorithm>
#include <atomic>
#include <cmath>
#include <numeric>
#include <stdexcept>
#include <thread>

#include "sim_target/physics/truth.hpp"

namespace lanewright::sim {

namespace {

// job(i) for i below count, on `threads` threads; each result has its own place, so it does not
// matter which thread does what.
template <class Job>
void for_each_index(std::size_t count, unsigned threads, const Job& job) {
    std::atomic<std::size_t> next{0};
    constexpr std::size_t chunk = 64;
    const auto work = [&] {
        for (;;) {
            const std::size_t begin = next.fetch_add(chunk);
            if (begin >= count) return;
            for (std::size_t i = begin; i < std::min(count, begin + chunk); ++i) job(i);
        }
    };
    std::vector<std::jthread> helpers;
    for (unsigned i = 1; i < threads; ++i) helpers.emplace_back(work);
    work();
}

// Before any thread starts: an exception inside one could not be caught by the caller.
void check_ratio(double error_ratio) {
    if (!(error_ratio > 0 && error_ratio <= 0.1))
        throw std::invalid_argument("an error ratio above 0 and at most 0.1 is needed");
}

CodesScore evaluated(const Oracle& oracle, std::vector<int> codes, const Required& required) {
    CodesScore result;
    result.codes = std::move(codes);
    result.margins = oracle.margins(result.codes, required.error_ratio);
    result.score = score(result.margins, required);
    return result;
}

// All codes that differ by at most one in every dimension, in the order of codes_at().
std::vector<std::vector<int>> neighbours(const Oracle& oracle, const std::vector<int>& codes) {
    const std::vector<int> counts = oracle.code_counts();
    std::vector<std::vector<int>> all{{}};
    for (std::size_t i = 0; i < codes.size(); ++i) {
        std::vector<std::vector<int>> longer;
        for (const std::vector<int>& begun : all) {
            for (int code = codes[i] - 1; code <= codes[i] + 1; ++code) {
                if (code < 0 || code >= counts[i]) continue;
                longer.push_back(begun);
                longer.back().push_back(code);
            }
        }
        all = std::move(longer);
    }
    return all;
}

const CodesScore& best_of(const std::vector<CodesScore>& results) {
    return *std::max_element(
        results.begin(), results.end(),
        [](const CodesScore& a, const CodesScore& b) { return a.score < b.score; });
}

}  // namespace

std::vector<CodesScore> all_codes(const Oracle& oracle, const Required& required,
                                  unsigned threads) {
    check_ratio(required.error_ratio);
    std::vector<CodesScore> results(oracle.combinations());
    for_each_index(results.size(), threads, [&](std::size_t i) {
        results[i] = evaluated(oracle, oracle.codes_at(i), required);
    });
    return results;
}

CodesScore best_codes(const Oracle& oracle, const Required& required, unsigned threads,
                      double share) {
    check_ratio(required.error_ratio);
    const std::size_t count = oracle.combinations();
    std::vector<double> screened(count);
    for_each_index(count, threads, [&](std::size_t i) {
        screened[i] = oracle.screening_score(oracle.codes_at(i), required);
    });
    std::vector<std::size_t> order(count);
    std::iota(order.begin(), order.end(), std::size_t{0});
    std::stable_sort(order.begin(), order.end(),
                     [&](std::size_t a, std::size_t b) { return screened[a] > screened[b]; });
    const auto wanted = static_cast<std::size_t>(std::ceil(share * static_cast<double>(count)));
    order.resize(std::clamp<std::size_t>(wanted, 1, count));
    std::sort(order.begin(), order.end());

    std::vector<CodesScore> results(order.size());
    for_each_index(order.size(), threads, [&](std::size_t i) {
        results[i] = evaluated(oracle, oracle.codes_at(order[i]), required);
    });
    CodesScore best = best_of(results);
    for (bool better = true; better;) {
        const auto around = neighbours(oracle, best.codes);
        std::vector<CodesScore> near(around.size());
        for_each_index(around.size(), threads,
                       [&](std::size_t i) { near[i] = evaluated(oracle, around[i], required); });
        better = best_of(near).score > best.score;
        if (better) best = best_of(near);
    }
    return best;
}

}  // namespace lanewright::sim
