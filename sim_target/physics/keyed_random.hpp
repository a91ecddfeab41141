#pragma once
// Purpose:   random numbers that are a function of a key, not of a stream: a draw that is made
//            again after a restart, or in another order, is the same draw.
// Ownership: values only.
// Threads:   no shared state; one object per user.
// Source:    Philox 4x32-10, Salmon, Moraes, Dror, Shaw, "Parallel random numbers: as easy as
//            1, 2, 3", SC11. The key words are folded in by running the generator over them.

#include <array>
#include <cstdint>
#include <initializer_list>
#include <span>

namespace lanewright::sim {

using PhiloxCounter = std::array<std::uint32_t, 4>;
using PhiloxKey = std::array<std::uint32_t, 2>;

// Ten rounds of Philox 4x32.
PhiloxCounter philox(PhiloxCounter counter, PhiloxKey key);

// What a draw is for; part of every key, so that no two uses share numbers.
enum class Purpose : std::uint32_t {
    element_error = 1,
    decision_offset = 2,
    phase_offset = 3,
    latched_edge = 4,
    board_fault = 5,
    board_telemetry = 6,
    process_scale = 7,
    crosstalk_phase = 8,
    population_board = 9,
    population_lane = 10,
    monitor_fixed = 20,
    monitor_position = 21,
    monitor_look = 22,
    monitor_event = 23,
    monitor_drift = 24,
    phase_wander = 25,
    lock_landing = 26,
    return_error = 27,
    counted_errors = 28
};

class KeyedRandom {
  public:
    KeyedRandom(std::uint64_t seed, Purpose purpose, std::span<const std::uint64_t> words);
    KeyedRandom(std::uint64_t seed, Purpose purpose, std::initializer_list<std::uint64_t> words)
        : KeyedRandom(seed, purpose, std::span<const std::uint64_t>(words.begin(), words.size())) {}

    std::uint32_t bits();
    double uniform();  // inside (0, 1), 53 bits, never an end
    double normal();   // mean 0, standard deviation 1 (Box and Muller 1958)

  private:
    PhiloxKey key_;
    std::uint64_t block_ = 0;
    PhiloxCounter words_{};
    unsigned left_ = 0;
};

}  // namespace lanewright::sim
