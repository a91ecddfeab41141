#pragma once
// Purpose:   what goes wrong on the wire on purpose: frames flipped, cut, doubled, late; noise
//            and console text. All draws come from one stream of their own, so that they change
//            nothing of what the chip measures.
// Ownership: keeps its options and its place in the stream.
// Threads:   io thread.

#include <chrono>
#include <string>
#include <vector>

#include "sim_target/board/board_side.hpp"
#include "sim_target/physics/keyed_random.hpp"

namespace lanewright::sim {

struct FramePiece {
    Octets bytes;  // with the 00 at its end
    std::chrono::nanoseconds delay{};
};

class WireFaults {
  public:
    explicit WireFaults(FaultOptions options);

    // What arrives of a frame that was sent; `line_bytes` ends with its 00.
    std::vector<FramePiece> pass(Octets line_bytes, Direction direction);
    // Text to print before a frame to the host; often empty.
    std::string console();
    Octets garbage();

    const FaultOptions& options() const { return options_; }

  private:
    bool strikes(const RandomFault& fault, Direction direction);
    std::size_t below(std::size_t count);

    FaultOptions options_;
    KeyedRandom random_;
};

}  // namespace lanewright::sim
