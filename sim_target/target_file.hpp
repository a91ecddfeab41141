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
#include "sim_target/monitor_options.hpp"
#include "sim_target/physics/eye.hpp"
#include "sim_target/physics/network.hpp"
#include "sim_target/physics/touchstone.hpp"
#include "sim_target/physics/two_ports.hpp"

namespace lanewright::sim {

struct Transmitter {
    double swing_mv = 800;    // differential, peak to peak, into a matched load
    double rise_s = 12e-12;   // 20 % to 80 % of the Gaussian edge filter; 0: none
    double bandwidth_hz = 0;  // of a further single pole; 0: none
    double pre_tap = 0;       // share of the swing that the next symbol takes, with its sign
    double post_tap = 0;      // likewise the symbol before; the cursor has what both leave
    double source_ohm = 50;   // each half
    double pad_f = 0;
};

struct TouchstoneChannel {
    std::string path;  // resolved against the target file's folder
    PortPair near{1, 2}, far{3, 4};
    bool differential = false;  // two-port files only: their reference is that of a pair
    int repeat = 1;
};

// A neighbour whose signal couples into the lane ahead of its equalizer. Coupling rises with
// frequency up to the bit rate (one pole there), as that of short or weakly coupled lines does.
struct CrosstalkSource {
    bool far_end = true;       // it has come the lane's own way; else from a near transmitter
    double coupling_db = -40;  // of the wave at half the bit rate: into the lane, or at its input
    double phase_ui = -1;      // to the lane's own symbols; below zero: drawn for the lane
};

// A lane has a line or a file, and what else stands in its way.
struct LaneChannel {
    Line line;
    std::optional<TouchstoneChannel> touchstone;
    std::optional<PackageLine> near_package, far_package;  // at the transmitter, at the receiver
    std::optional<Stub> near_stub, far_stub;               // where package and channel meet
    std::vector<CrosstalkSource> crosstalk;
    double swing_mv = 0;         // 0: the transmitter's
    double knee_mv = 0;          // of the compressive stage; 0: none
    bool outside_plain = false;  // more than a plain lossy line; told by populations only
};

// Scale of all resistors and of all capacitors of a die.
struct Process {
    double resistor_scale = 1, capacitor_scale = 1;
    double resistor_sigma = 0, capacitor_sigma = 0;  // drawn for the die, cut off at three
};

// Coefficients are relative, per kelvin, from the reference on.
struct Temperature {
    double celsius = 25;
    double reference_celsius = 25;
    double resistor_per_k = 0;  // banks; the termination is taken as calibrated
    double capacitor_per_k = 0;
    double switch_per_k = 0;        // on-resistance
    double conductor_per_k = 0;     // resistivity of the line's conductor
    double loss_tangent_per_k = 0;  // of the line
};

struct Spread {
    double offset_sigma_mv = 0;  // of the decision threshold, from lane to lane
    double phase_sigma_ui = 0;   // of the sampling phase, from lane to lane
};

// What an ordinary target file says lane by lane, as ranges to draw from, evenly.
struct Range {
    double from = 0, to = 0;
};

struct Population {
    int boards = 1, lanes = 8;
    std::uint64_t seed = 1;
    Range length_mm{100, 500}, impedance_ohm{46, 54}, loss_tangent{0.008, 0.008};
    Range swing_mv{800, 800}, knee_mv{0, 0}, crosstalk_db{-60, -60};
    int near_aggressors = 0, far_aggressors = 0;
    // Only of the lanes outside a plain lossy line: every second one, in an order drawn for each
    // board. A file in place of a line on one in four of these, where there are files.
    Range package_mm{0, 0}, package_ohm{39.1, 39.1}, ball_f{0, 0}, stub_mm{0, 0};
    Range roughness_um{0, 0}, step_ohm{0, 0};
    std::vector<TouchstoneChannel> files;
    LaneChannel shared;  // what the file says for all lanes
};

struct TargetFile {
    std::string path, folder;
    std::string source;  // the file's whole text
    std::string name;
    std::uint64_t seed = 1;
    double time_scale = 1;  // of latency, line rate and dwell; 0: none
    Grid grid;
    Transmitter transmitter;
    Receiver receiver;
    Noise noise;  // at the temperature
    Process process;
    Temperature temperature;
    double sampler_noise_mv = 1;
    double sampler_jitter_ui = 0;  // random, rms
    Spread spread;
    MonitorOptions monitor;
    ChipOfTarget chip;
    Required required;               // what `truth` scores by where the command line names nothing
    std::vector<int> reset_codes;    // r1, c1, r2, c2
    std::vector<LaneChannel> lanes;  // of a population: those of its board 0
    std::optional<Population> population;
    int board = 0;  // of the population
};

// The tuned dimensions, in the order of all codes here.
const std::vector<std::string_view>& dimension_names();

// Reads the sections that belong to the board's side (board, binding, wire, faults).
using BoardSideReader = std::function<void(const Object& top)>;

// The boards of a population differ in lanes, die, bank errors and every other draw; the target
// must have a population, board from 0 to below its number, else std::out_of_range.
TargetFile population_board(const TargetFile& target, int board);
// The same for a number that a user gave (below zero: none given). Empty if the target is now that
// board, else what is wrong with the number.
std::string choose_board(TargetFile& target, int board);

// Empty if anything in the file is not as it must be; `complaints` then has everything that is
// wrong with it. Without a reader for the board's side its sections are accepted unread.
std::optional<TargetFile> load_target(const std::string& path, Complaints& complaints,
                                      const BoardSideReader& board_side = {});
std::optional<TargetFile> parse_target(const std::string& text, const std::string& path,
                                       Complaints& complaints,
                                       const BoardSideReader& board_side = {});

}  // namespace lanewright::sim
