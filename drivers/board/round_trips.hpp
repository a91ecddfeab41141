#pragma once
// Purpose:   how long answers took, as a histogram.
// Ownership: values only.
// Threads:   no shared state.

#include <array>
#include <chrono>
#include <cstdint>

namespace lanewright {

// Of requests that were answered at the first attempt and do not wait on the board themselves.
class RoundTrips {
  public:
    // Bin i counts times below 2^i microseconds and not below 2^(i-1); the last takes the rest.
    static constexpr std::size_t bin_count = 24;

    void add(std::chrono::nanoseconds time);
    std::uint64_t count() const { return count_; }
    const std::array<std::uint64_t, bin_count>& bins() const { return bins_; }
    std::chrono::nanoseconds shortest() const { return shortest_; }  // 0 when none was counted
    std::chrono::nanoseconds longest() const { return longest_; }
    std::chrono::nanoseconds mean() const;

  private:
    std::array<std::uint64_t, bin_count> bins_{};
    std::uint64_t count_ = 0;
    std::chrono::nanoseconds shortest_{}, longest_{}, sum_{};
};

}  // namespace lanewright
