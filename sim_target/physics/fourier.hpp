#pragma once
// Purpose:   from a one-sided spectrum to the real, periodic waveform.
// Ownership: an object owns its tables; it is built once per length.
// Threads:   const calls may run at the same time, each with its own work buffer.
// Source:    radix-2 decimation in time, Cooley and Tukey, Math. Comp. 19 (1965) 297-301.

#include <cstddef>
#include <span>
#include <vector>

#include "sim_target/physics/complex_math.hpp"

namespace lanewright::sim {

class RealInverseFourier {
  public:
    // `length`: samples of the waveform, a power of two from 8.
    explicit RealInverseFourier(std::size_t length);

    // wave[n] = sum over k of spectrum[k]·e^(+j·2·pi·k·n/length), the bins from length/2 on being
    // the conjugates of those below. spectrum holds at most length/2 bins (missing ones are
    // zero); the imaginary part of bin 0 is not used. wave has `length` samples. Multiply the
    // spectrum by the bin width in hertz to get the inverse Fourier transform.
    void run(std::span<const Cx> spectrum, std::vector<Cx>& work, std::span<double> wave) const;

    std::size_t length() const { return 2 * half_; }

  private:
    std::size_t half_;
    std::vector<std::size_t> reversed_;
    std::vector<Cx> turn_;    // e^(+j·2·pi·k/half)
    std::vector<Cx> unpack_;  // e^(+j·2·pi·k/length)
};

}  // namespace lanewright::sim
