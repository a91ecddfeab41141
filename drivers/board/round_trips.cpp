#include "drivers/board/round_trips.hpp"

#include <algorithm>
#include <bit>

namespace lanewright {

void RoundTrips::add(std::chrono::nanoseconds time) {
    const auto us = static_cast<std::uint64_t>(std::max<std::int64_t>(
        0, std::chrono::duration_cast<std::chrono::microseconds>(time).count()));
    bins_[std::min<std::size_t>(static_cast<std::size_t>(std::bit_width(us)), bin_count - 1)] += 1;
    shortest_ = count_ == 0 ? time : std::min(shortest_, time);
    longest_ = std::max(longest_, time);
    sum_ += time;
    ++count_;
}

std::chrono::nanoseconds RoundTrips::mean() const {
    return count_ == 0 ? std::chrono::nanoseconds{} : sum_ / static_cast<std::int64_t>(count_);
}

}  // namespace lanewright
