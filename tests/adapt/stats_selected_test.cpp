#include <catch2/catch.hpp>
#include <cmath>
#include <vector>

#include "adapt/stats/random.hpp"
#include "adapt/stats/selected.hpp"

using namespace lanewright;

namespace {

struct Trial {
    std::vector<Noisy> values;
    std::vector<double> truths;
    std::size_t best = 0;
};

// True values by `draw`, each measured with that noise; the best measured one is chosen.
template <class Draw>
Trial trial(std::uint32_t number, std::size_t count, double sigma, const Draw& draw) {
    Random random({31, number, 0, 0});
    Trial out;
    for (std::size_t i = 0; i < count; ++i) {
        const double truth = draw(random);
        out.truths.push_back(truth);
        out.values.push_back({truth + sigma * random.normal(), sigma});
        if (out.values[i].value > out.values[out.best].value) out.best = i;
    }
    return out;
}

struct Bias {
    double raw = 0, shrunk = 0, error = 0;  // error: of the mean of shrunk
};

template <class Draw>
Bias bias_of(std::uint32_t trials, std::size_t count, double sigma, const Draw& draw) {
    Bias bias;
    double squares = 0;
    for (std::uint32_t i = 0; i < trials; ++i) {
        const Trial one = trial(i, count, sigma, draw);
        const double left = shrunk(one.values, one.best).mean - one.truths[one.best];
        bias.raw += (one.values[one.best].value - one.truths[one.best]) / trials;
        bias.shrunk += left / trials;
        squares += left * left / trials;
    }
    bias.error = std::sqrt(squares / trials);
    return bias;
}

}  // namespace

TEST_CASE("The best of many is too good and its posterior mean is not") {
    // Normal true values, as in James & Stein (Proc. 4th Berkeley Symp. 1, 361-379, 1961).
    const Bias normal = bias_of(200, 500, 1, [](Random& random) { return random.normal(); });
    INFO("normal: raw " << normal.raw << ", shrunk " << normal.shrunk << " +- " << normal.error);
    CHECK(normal.raw > 1);
    CHECK(std::abs(normal.shrunk) < 0.15 * normal.raw + 3 * normal.error);
    // The end of a landscape's distribution: a ridge that falls off on all sides.
    const Bias ridge = bias_of(200, 2000, 0.05, [](Random& random) {
        double distance = 0;
        for (int i = 0; i < 4; ++i) {
            const double x = random.uniform() - 0.5;
            distance += x * x;
        }
        return 1 - distance;
    });
    INFO("ridge: raw " << ridge.raw << ", shrunk " << ridge.shrunk << " +- " << ridge.error);
    CHECK(ridge.raw > 0.05);
    CHECK(std::abs(ridge.shrunk) < 0.25 * ridge.raw + 3 * ridge.error);
}

TEST_CASE("With normal true values the posterior is that of Bayes's formula") {
    // Prior variance 1, noise variance 1: the posterior mean is half the value, its variance half.
    const Trial one = trial(7, 20'000, 1, [](Random& random) { return random.normal(); });
    for (std::size_t i = 0; i < 20; ++i) {
        if (std::abs(one.values[i].value) > 2) continue;
        const Posterior posterior = shrunk(one.values, i);
        CHECK(posterior.mean == Approx(one.values[i].value / 2).margin(0.1));
        CHECK(posterior.std_error == Approx(std::sqrt(0.5)).margin(0.12));
    }
}

TEST_CASE("Equal true values are all shrunk to their mean") {
    const Trial one = trial(3, 1000, 1, [](Random&) { return 5.0; });
    CHECK(shrunk(one.values, one.best).mean == Approx(5).margin(0.3));
    CHECK(one.values[one.best].value > 7.5);
}

TEST_CASE("A value far from all others is left as it is") {
    std::vector<Noisy> values{{0, 1}, {0.5, 1}, {-0.5, 1}, {100, 1}};
    const Posterior far = shrunk(values, 3);
    CHECK(far.mean == 100);
    CHECK(far.std_error == 1);
    CHECK(far.compared_with == 1);
    values.resize(1);
    CHECK(shrunk(values, 0).mean == 0);
}
