#include "adapt/margin/closed_fit.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <optional>
#include <tuple>
#include <utility>
#include <vector>

#include "adapt/stats/normal.hpp"
#include "adapt/stats/q_scale.hpp"

namespace lanewright {
namespace {

// Between half errors and few a line bends more than far out: where interference is large, the
// worst pattern alone is left there.
constexpr double closed_bend_per_q = 0.25;

using Three = std::array<double, 3>;  // ones and zeros at the centre, fall per step
using Matrix = std::array<Three, 3>;

struct Point {
    double steps = 0, q = 0, weight = 0;  // steps signed: up is positive
};

double q_of(const Three& model, double steps) {
    return normal_q(0.5 * (normal_tail(model[0] - model[2] * steps) +
                           normal_tail(model[1] + model[2] * steps)));
}

void take(std::vector<Point>& points, std::span<const Seen> seen, double sign) {
    constexpr double most_ratio = 0.3;
    for (const Seen& each : seen) {
        if (each.errors == 0 || each.at_least || each.ratio() > most_ratio) continue;
        if (each.steps == 0 && sign < 0) continue;  // stands in both
        const double q = each.q;
        points.push_back({sign * each.steps, q, expected_information(each.bits, q)});
    }
}

Matrix inverse(const Matrix& m) {
    Matrix out{};
    const auto minor = [&](std::size_t r, std::size_t c) {
        const std::size_t a = (r + 1) % 3, b = (r + 2) % 3, d = (c + 1) % 3, e = (c + 2) % 3;
        return m[a][d] * m[b][e] - m[a][e] * m[b][d];
    };
    double determinant = 0;
    for (std::size_t c = 0; c < 3; ++c) determinant += m[0][c] * minor(0, c);
    for (std::size_t r = 0; r < 3; ++r) {
        for (std::size_t c = 0; c < 3; ++c) out[c][r] = minor(r, c) / determinant;
    }
    return out;
}

// Weighted squares, with the normal equations of one step of the Gauss-Newton method.
double squares(std::span<const Point> points, const Three& model, Matrix* normal, Three* pull) {
    double sum = 0;
    for (const Point& point : points) {
        const double away = point.q - q_of(model, point.steps);
        sum += point.weight * away * away;
        if (normal == nullptr) continue;
        Three slope{};
        for (std::size_t k = 0; k < 3; ++k) {
            Three moved = model;
            const double by = 1e-5 * std::max(1.0, std::abs(model[k]));
            moved[k] += by;
            slope[k] = (q_of(moved, point.steps) - (point.q - away)) / by;
        }
        for (std::size_t r = 0; r < 3; ++r) {
            (*pull)[r] += point.weight * slope[r] * away;
            for (std::size_t c = 0; c < 3; ++c) {
                (*normal)[r][c] += point.weight * slope[r] * slope[c];
            }
        }
    }
    return sum;
}

// Levenberg's damping; the fall stays above zero.
std::optional<Matrix> solve(std::span<const Point> points, Three& model) {
    double damping = 1e-3;
    double now = squares(points, model, nullptr, nullptr);
    for (int round = 0; round < 60; ++round) {
        Matrix normal{};
        Three pull{};
        squares(points, model, &normal, &pull);
        Matrix damped = normal;
        for (std::size_t k = 0; k < 3; ++k) damped[k][k] *= 1 + damping;
        const Matrix step = inverse(damped);
        Three next = model;
        for (std::size_t r = 0; r < 3; ++r) {
            for (std::size_t c = 0; c < 3; ++c) next[r] += step[r][c] * pull[c];
        }
        next[2] = std::max(next[2], 0.1 * model[2]);
        const double then = squares(points, next, nullptr, nullptr);
        if (!std::isfinite(then) || then > now) {
            damping *= 10;
            if (damping > 1e12) break;
            continue;
        }
        const bool done = now - then < 1e-9 * (1 + now);
        now = then;
        model = next;
        damping = std::max(damping / 10, 1e-12);
        if (done) break;
    }
    Matrix normal{};
    Three pull{};
    squares(points, model, &normal, &pull);
    const Matrix covariance = inverse(normal);
    for (std::size_t k = 0; k < 3; ++k) {
        if (!(covariance[k][k] > 0) || !std::isfinite(covariance[k][k])) return std::nullopt;
    }
    return covariance;
}

// Distance to the level of one side and its standard error; `side` 0 the ones, 1 the zeros.
std::pair<double, double> level(const Three& model, const Matrix& covariance, std::size_t side,
                                double wanted_q) {
    const double lacking = wanted_q - model[side];
    const double steps = -lacking / model[2];
    const double by_side = 1 / model[2], by_fall = lacking / (model[2] * model[2]);
    const double variance = by_side * by_side * covariance[side][side] +
                            2 * by_side * by_fall * covariance[side][2] +
                            by_fall * by_fall * covariance[2][2];
    const double bend = 0.5 * closed_bend_per_q * lacking * lacking / model[2];
    return {steps, std::sqrt(std::max(variance, 0.0) + bend * bend)};
}

}  // namespace

ClosedFit fit_closed(std::span<const Seen> up, std::span<const Seen> down, double wanted_q) {
    ClosedFit fit;
    std::vector<Point> points;
    take(points, up, 1);
    take(points, down, -1);
    double highest = 0, lowest = 0, least_q = 0, most_q = 0;
    for (const Point& point : points) {
        highest = std::max(highest, point.steps);
        lowest = std::min(lowest, point.steps);
        most_q = std::max(most_q, point.q);
        if (least_q == 0 || point.q < least_q) least_q = point.q;
    }
    if (points.size() < 3 || highest <= 0 || lowest >= 0) return fit;
    const double reach = std::max(highest, -lowest);
    // Away from the centre one kind of bit makes nearly all the errors: half of all bits.
    Three model{most_q, most_q, std::max(most_q - least_q, 0.05) / reach};
    const auto covariance = solve(points, model);
    if (!covariance) return fit;
    fit.solved = true;
    std::tie(fit.up_steps, fit.up_error) = level(model, *covariance, 0, wanted_q);
    std::tie(fit.down_steps, fit.down_error) = level(model, *covariance, 1, wanted_q);
    fit.fall = model[2];
    fit.fall_error = std::sqrt((*covariance)[2][2]);
    return fit;
}

}  // namespace lanewright
