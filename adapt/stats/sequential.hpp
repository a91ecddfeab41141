#pragma once
// Purpose:   the sequential probability ratio test for an error ratio: as few bits as it takes to
//            tell a low ratio from a high one (A. Wald, Ann. Math. Stat. 16, 117-186, 1945).
// Ownership: values and pure functions.
// Threads:   any.
//
// With the chances `alpha` of refusing the low ratio where it holds and `beta` of taking it where
// the high one holds, the test goes on while ln(beta / (1 - alpha)) < log ratio <
// ln((1 - beta) / alpha). Both errors are kept to within a few percent of themselves.

#include <cstdint>

namespace lanewright {

enum class Leaning : std::uint8_t { undecided, low, high };

class RatioTest {
  public:
    // 0 < low < high < 1; alpha and beta inside (0, 1/2). Anything else never decides.
    RatioTest(double low, double high, double alpha = 0.05, double beta = 0.05);

    // After `errors` in `bits`, no matter how they were cut into looks.
    Leaning judge(std::uint64_t errors, double bits) const;
    double log_ratio(std::uint64_t errors, double bits) const;

    // The line form: low where errors <= low_start + slope bits, high where errors >= high_start +
    // slope bits.
    double slope() const;
    double low_start() const;
    double high_start() const;

    // The least bits without an error after which the low ratio is taken.
    double bits_without_error() const;

    // Wald's approximation of the mean number of bits until the test decides, at the low and at the
    // high ratio.
    double mean_bits_at_low() const;
    double mean_bits_at_high() const;

  private:
    double low_, high_, alpha_, beta_;
    double take_low_ = 0, take_high_ = 0;      // limits of the log ratio
    double per_error_ = 0, per_good_bit_ = 0;  // what each adds to it
};

}  // namespace lanewright
