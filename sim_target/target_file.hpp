#pragma once
// Purpose:   the target file (format lanewright-target/1): everything that a simulated board is.
// Ownership: values only.
// Threads:   no shared state.
// Units in the file are the last word of a key (swing_mv, pad_ff); here they are SI where the
// name has no unit of its own.

#include <cstdint>
#include <functional>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "drivers/config/json_reader.hpp"
#include "sim_target/physics/eye.hpp"
#include "sim_target/physics/network.hpp"
#include "sim_target/physics/touchstone.hpp"

namespace lanewright::sim {

struct Transmitter {
    double swing_mv = 800;   // differential, peak to peak, into a matched load
    double rise_s = 12e-12;  // 20 % to 80 % of the Gaussian edge filter; 0: none
    double source_ohm = 50;  // each half
    double pad_f = 0;
};

struct TouchstoneChannel {
    std::string path;  // resolved against the target file's folder
    PortPair near{1, 2}, far{3, 4};
    bool differential = false;  // two-port files only: their reference is that of a pair
    int repeat = 1;
};

// A lane has a line or a file.
struct LaneChannel {
    Line line;
    std::optional<TouchstoneChannel> touchstone;
};

struct LatchedMonitor {
    double height_step_mv = 2;
    double width_step_ui = 1.0 / 64.0;
    int height_steps_max = 255;
    int width_steps_max = 31;
    double height_sigma_mv = 0;
    double width_sigma_ui = 0;
    double error_ratio = 1e-6;  // at which the chip states its edges
};

struct Spread {
    double offset_sigma_mv = 0;  // of the decision threshold, from lane to lane
    double phase_sigma_ui = 0;   // of the sampling phase, from lane to lane
};

struct TargetFile {
    std::string path, folder;
    std::string name;
    std::uint64_t seed = 1;
    double time_scale = 1;  // of latency, line rate and dwell; 0: none
    Grid grid;
    Transmitter transmitter;
    Receiver receiver;
    Noise noise;
    double sampler_noise_mv = 1;
    double sampler_jitter_ui = 0;  // random, rms
    Spread spread;
    LatchedMonitor monitor;
    Required required;             // what `truth` scores by where the command line names nothing
    std::vector<int> reset_codes;  // r1, c1, r2, c2
    std::vector<LaneChannel> lanes;
};

// The tuned dimensions, in the order of all codes here.
const std::vector<std::string_view>& dimension_names();

// Reads the sections that belong to the board's side (board, binding, wire, faults).
using BoardSideReader = std::function<void(const Object& top)>;

// Empty if anything in the file is not as it must be; `complaints` then has everything that is
// wrong with it. Without a reader for the board's side its sections are accepted unread.
std::optional<TargetFile> load_target(const std::string& path, Complaints& complaints,
                                      const BoardSideReader& board_side = {});
std::optional<TargetFile> parse_target(const std::string& text, const std::string& path,
                                       Complaints& complaints,
                                       const BoardSideReader& board_side = {});

}  // namespace lanewright::sim
