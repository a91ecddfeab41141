#pragma once
// Purpose:   the oracle: the noise-free margin of any codes of a lane, and the best codes. For
// tests
//            and benchmarks, and for what the simulated board's monitor latches. No strategy can
//            reach it: it is not on any wire.
// Ownership: an Oracle owns the lane's tables (some 2 MB) and keeps nothing of the target file.
// Threads:   const calls may run at the same time; each thread has its own work memory.

#include <cstdint>
#include <memory>
#include <span>
#include <string>
#include <vector>

#include "sim_target/physics/eye.hpp"
#include "sim_target/target_file.hpp"

namespace lanewright::sim {

// What a moment adds to the noise-free truth: nothing, unless told otherwise.
struct Moment {
    double phase_ui = 0;   // of the sampling phase: slow wander, where the loop landed
    double offset_mv = 0;  // of the decision threshold
    double gain = 1;       // of the signal at the sampler, its noise with it; above 0
};

// One set of codes of one lane, solved once and then asked many times: what a monitor looks at.
// Not for two threads at a time.
class EyeProbe {
  public:
    virtual ~EyeProbe() = default;
    // Share of wrong bits against the known pattern, at a phase and threshold relative to the data
    // sampler's decision point.
    virtual double error_ratio(double phase_ui, double offset_mv, const Moment& moment) = 0;
    virtual Margins margins(double error_ratio, const Moment& moment) = 0;
    // Share of bits in which a monitor's sampler at that place and the data sampler at its own
    // differ: what a monitor that compares with the receiver's decision counts.
    virtual double disagreement(double phase_ui, double offset_mv, const Moment& moment) = 0;
    // Between the crossings of the equalized waveform that a thousandth of the transitions comes
    // before and a thousandth comes after, interference and noise together; at most 1.
    virtual double crossing_spread_ui() const = 0;
};

class Oracle {
  public:
    // lane from 0, below target.lanes.size(). Throws BadData for a Touchstone file that cannot be
    // used.
    Oracle(const TargetFile& target, int lane);
    ~Oracle();
    Oracle(Oracle&&) noexcept;
    Oracle& operator=(Oracle&&) noexcept;

    // Codes in the order r1, c1, r2, c2, each inside its bank, else std::out_of_range; error_ratio
    // in (0, 0.1], else std::invalid_argument.
    Margins margins(const std::vector<int>& codes, double error_ratio) const;
    double error_ratio_at(const std::vector<int>& codes, double phase_ui, double offset_mv) const;
    double screening_score(const std::vector<int>& codes, const Required& required) const;
    // Levels at the error ratio across the eye; see Eye::contour_mv().
    std::vector<double> contour_mv(const std::vector<int>& codes, double error_ratio,
                                   std::size_t phases) const;
    // The oracle must outlive it.
    std::unique_ptr<EyeProbe> probe(const std::vector<int>& codes) const;
    // One window of the response to a single +1 symbol, differential millivolts.
    std::vector<double> pulse_mv(const std::vector<int>& codes) const;

    int lane() const;
    const Decision& decision() const;
    std::vector<int> code_counts() const;
    std::size_t combinations() const;
    std::vector<int> codes_at(std::size_t index) const;  // the last dimension moves fastest
    // Loss of the channel between matched ends at half the bit rate.
    double nyquist_loss_db() const;
    // What the user must know of a channel known only between two frequencies; empty for a line.
    const std::string& channel_note() const;

  private:
    struct Parts;
    std::unique_ptr<const Parts> parts_;
};

struct CodesScore {
    std::vector<int> codes;
    Margins margins;
    double score = 0;
};

// Every combination, in the order of codes_at(). The result does not depend on `threads` (from 1).
std::vector<CodesScore> all_codes(const Oracle& oracle, const Required& required, unsigned threads);
// Screens all by peak distortion with noise, evaluates the best `share` in full and climbs from the
// best of these over neighbouring codes. Of equals the first in the order of codes_at().
CodesScore best_codes(const Oracle& oracle, const Required& required, unsigned threads,
                      double share = 0.02);

}  // namespace lanewright::sim
