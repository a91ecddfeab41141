#include "adapt/stats/sequential.hpp"

#include <cmath>
#include <limits>

namespace lanewright {

RatioTest::RatioTest(double low, double high, double alpha, double beta)
    : low_(low), high_(high), alpha_(alpha), beta_(beta) {
    constexpr double infinity = std::numeric_limits<double>::infinity();
    const auto share = [](double value) { return value > 0 && value < 0.5; };
    if (!(low > 0) || !(high > low) || !(high < 1) || !share(alpha) || !share(beta)) {
        take_low_ = -infinity;
        take_high_ = infinity;
        return;
    }
    take_low_ = std::log(beta / (1 - alpha));
    take_high_ = std::log((1 - beta) / alpha);
    per_error_ = std::log(high / low);
    per_good_bit_ = std::log1p(-high) - std::log1p(-low);
}

double RatioTest::log_ratio(std::uint64_t errors, double bits) const {
    const auto count = static_cast<double>(errors);
    return count * per_error_ + (bits - count) * per_good_bit_;
}

Leaning RatioTest::judge(std::uint64_t errors, double bits) const {
    const double ratio = log_ratio(errors, bits);
    if (ratio <= take_low_) return Leaning::low;
    if (ratio >= take_high_) return Leaning::high;
    return Leaning::undecided;
}

double RatioTest::slope() const {
    return -per_good_bit_ / (per_error_ - per_good_bit_);
}

double RatioTest::low_start() const {
    return take_low_ / (per_error_ - per_good_bit_);
}

double RatioTest::high_start() const {
    return take_high_ / (per_error_ - per_good_bit_);
}

double RatioTest::bits_without_error() const {
    return std::ceil(take_low_ / per_good_bit_);
}

double RatioTest::mean_bits_at_low() const {
    const double drift = low_ * per_error_ + (1 - low_) * per_good_bit_;
    return ((1 - alpha_) * take_low_ + alpha_ * take_high_) / drift;
}

double RatioTest::mean_bits_at_high() const {
    const double drift = high_ * per_error_ + (1 - high_) * per_good_bit_;
    return (beta_ * take_low_ + (1 - beta_) * take_high_) / drift;
}

}  // namespace lanewright
