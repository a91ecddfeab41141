#include "adapt/stats/selected.hpp"

#include <algorithm>
#include <cmath>
#include <map>
#include <utility>
#include <vector>

namespace lanewright {

namespace {

// Further away than this many standard errors nothing touches the posterior of the chosen value.
constexpr double window = 6;
constexpr double grid_step = 0.25;    // of the prior, in standard errors
constexpr double value_step = 0.125;  // of the values, in standard errors: many are one
constexpr double error_classes = 8;   // of standard errors, in a factor of e
constexpr int most_iterations = 300;
constexpr double settled = 1e-7;  // change of a weight at which it stops

// Values that are one for this purpose, relative to the chosen one, in its standard errors.
struct Group {
    double value = 0, std_error = 1, count = 0;
};

std::vector<Group> groups_of(std::span<const Noisy> all, const Noisy& chosen) {
    std::map<std::pair<long, long>, double> counts;
    for (const Noisy& each : all) {
        const double value = (each.value - chosen.value) / chosen.std_error;
        if (!(std::abs(value) <= window)) continue;
        const double error = std::log(each.std_error / chosen.std_error);
        counts[{std::lround(value / value_step), std::lround(error * error_classes)}] += 1;
    }
    std::vector<Group> groups;
    for (const auto& [key, count] : counts) {
        groups.push_back({static_cast<double>(key.first) * value_step,
                          std::exp(static_cast<double>(key.second) / error_classes), count});
    }
    return groups;
}

std::vector<double> grid_over(const std::vector<Group>& groups) {
    const auto [lowest, highest] =
        std::minmax_element(groups.begin(), groups.end(),
                            [](const Group& a, const Group& b) { return a.value < b.value; });
    std::vector<double> grid;
    const auto points =
        static_cast<std::size_t>(std::ceil((highest->value - lowest->value) / grid_step)) + 1;
    for (std::size_t i = 0; i < points; ++i) {
        const double share =
            points == 1 ? 0 : static_cast<double>(i) / static_cast<double>(points - 1);
        grid.push_back(lowest->value + share * (highest->value - lowest->value));
    }
    return grid;
}

double density(double value, double std_error, double truth) {
    const double z = (value - truth) / std_error;
    return std::exp(-z * z / 2) / std_error;
}

// Weights of the grid's points under which the values are most likely.
std::vector<double> prior_of(const std::vector<Group>& groups, const std::vector<double>& grid) {
    std::vector<std::vector<double>> likelihood;
    double total = 0;
    for (const Group& group : groups) {
        auto& row = likelihood.emplace_back();
        for (const double truth : grid) row.push_back(density(group.value, group.std_error, truth));
        total += group.count;
    }
    std::vector<double> weights(grid.size(), 1.0 / static_cast<double>(grid.size()));
    for (int iteration = 0; iteration < most_iterations; ++iteration) {
        std::vector<double> next(grid.size(), 0.0);
        for (std::size_t i = 0; i < groups.size(); ++i) {
            double marginal = 0;
            for (std::size_t k = 0; k < grid.size(); ++k) marginal += weights[k] * likelihood[i][k];
            if (!(marginal > 0)) continue;
            const double factor = groups[i].count / (marginal * total);
            for (std::size_t k = 0; k < grid.size(); ++k) {
                next[k] += factor * weights[k] * likelihood[i][k];
            }
        }
        double change = 0;
        for (std::size_t k = 0; k < grid.size(); ++k) {
            change = std::max(change, std::abs(next[k] - weights[k]));
        }
        weights = std::move(next);
        if (change < settled) break;
    }
    return weights;
}

}  // namespace

Posterior shrunk(std::span<const Noisy> all, std::size_t chosen) {
    const Noisy& one = all[chosen];
    const std::vector<Group> groups = groups_of(all, one);
    Posterior out;
    for (const Group& group : groups) out.compared_with += static_cast<std::size_t>(group.count);
    if (out.compared_with < 2) return {one.value, one.std_error, out.compared_with};
    const std::vector<double> grid = grid_over(groups);
    const std::vector<double> weights = prior_of(groups, grid);
    double sum = 0, first = 0, second = 0;
    for (std::size_t k = 0; k < grid.size(); ++k) {
        const double share = weights[k] * density(0, 1, grid[k]);
        sum += share;
        first += share * grid[k];
        second += share * grid[k] * grid[k];
    }
    const double mean = first / sum;
    out.mean = one.value + one.std_error * mean;
    out.std_error = one.std_error * std::sqrt(std::max(second / sum - mean * mean, 0.0));
    return out;
}

}  // namespace lanewright
