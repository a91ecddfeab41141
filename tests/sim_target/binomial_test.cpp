#include "sim_target/monitor/binomial.hpp"

#include <catch2/catch.hpp>

using namespace lanewright::sim;

namespace {

double log_probability(double n, double p, double k) {
    return std::lgamma(n + 1) - std::lgamma(k + 1) - std::lgamma(n - k + 1) + k * std::log(p) +
           (n - k) * std::log1p(-p);
}

// Pearson's statistic of `draws` draws over eleven bins of about equal probability.
double chi_square(std::uint64_t n, double p, int draws) {
    const double size = static_cast<double>(n);
    const double mean = size * p, deviation = std::sqrt(mean * (1 - p));
    const double first = std::max(0.0, std::floor(mean - 9 * deviation - 10));
    const double last = std::min(size, std::ceil(mean + 9 * deviation + 20));
    std::vector<double> upper, expected;
    double in_bin = 0;
    for (double k = first; k <= last; ++k) {
        in_bin += std::exp(log_probability(size, p, k));
        if (in_bin < 1.0 / 11 || upper.size() == 10) continue;
        upper.push_back(k);
        expected.push_back(in_bin);
        in_bin = 0;
    }
    upper.push_back(last);
    expected.push_back(in_bin);
    std::vector<double> seen(upper.size(), 0);
    for (int i = 0; i < draws; ++i) {
        KeyedRandom random(11, Purpose::counted_errors, {n, static_cast<std::uint64_t>(i)});
        const double k = static_cast<double>(binomial(n, p, random));
        const auto bin = std::lower_bound(upper.begin(), upper.end(), k) - upper.begin();
        seen.at(static_cast<std::size_t>(bin)) += 1;
    }
    double sum = 0;
    for (std::size_t i = 0; i < seen.size(); ++i) {
        sum += std::pow(seen[i] - draws * expected[i], 2) / (draws * expected[i]);
    }
    return sum;
}

// Exceeded by one in a thousand of right generators with ten degrees of freedom (value from
// memory); fewer bins, where probabilities are lumpy, only make it safer.
constexpr double most_chi_square = 29.588;

}  // namespace

TEST_CASE("errors are drawn as the binomial distribution has them, whatever the method") {
    CHECK(chi_square(50, 0.06, 20000) < most_chi_square);
    CHECK(chi_square(1u << 20, 3e-6, 20000) < most_chi_square);
    CHECK(chi_square(200, 0.049, 20000) < most_chi_square);
    CHECK(chi_square(200, 0.051, 20000) < most_chi_square);
    CHECK(chi_square(400, 0.1, 20000) < most_chi_square);
    CHECK(chi_square(1000, 0.5, 20000) < most_chi_square);
    CHECK(chi_square(1000, 0.93, 20000) < most_chi_square);
    CHECK(chi_square(std::uint64_t{1} << 30, 1e-6, 20000) < most_chi_square);
}

TEST_CASE("a wrong share of errors would show in the check of the drawn counts") {
    const auto mean_of = [](double p) {
        double sum = 0;
        for (std::uint64_t i = 0; i < 2000; ++i) {
            KeyedRandom random(3, Purpose::counted_errors, {i});
            sum += static_cast<double>(binomial(std::uint64_t{1} << 40, p, random));
        }
        return sum / 2000;
    };
    // Five standard errors of the mean of 2,000 counts.
    const double expected = std::exp2(40) * 1e-9;
    CHECK(std::abs(mean_of(1e-9) - expected) < 5 * std::sqrt(expected / 2000));
    CHECK(std::abs(mean_of(1.02e-9) - expected) > 5 * std::sqrt(expected / 2000));
}

TEST_CASE("no bits, no share and every share give what they must") {
    KeyedRandom random(1, Purpose::counted_errors, {0});
    CHECK(binomial(0, 0.5, random) == 0);
    CHECK(binomial(1000, 0, random) == 0);
    CHECK(binomial(1000, -1, random) == 0);
    CHECK(binomial(1000, std::nan(""), random) == 0);
    CHECK(binomial(1000, 1, random) == 1000);
    CHECK(binomial(1000, 2, random) == 1000);
    CHECK(binomial(1u << 20, 1e-300, random) == 0);
    for (int i = 0; i < 1000; ++i) {
        CHECK(binomial(3, 0.9, random) <= 3);
    }
}
