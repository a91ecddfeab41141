#pragma once
// Purpose:   read scattering parameters from Touchstone 1.x files, and turn a two-port or a
//            four-port into the half circuit of a differential channel at any frequency.
// Ownership: values only.
// Threads:   no shared state.
// Source:    Touchstone File Format Specification, versions 1.1 and 2.0 (the part on version 1
//            files): a two-port line is f S11 S21 S12 S22; three ports and more are row by row.

#include <stdexcept>
#include <string>
#include <vector>

#include "sim_target/physics/channel.hpp"

namespace lanewright::sim {

// A file that can be read but not understood; what() starts with file:line.
class BadData : public std::runtime_error {
  public:
    using std::runtime_error::runtime_error;
};

struct Touchstone {
    std::size_t ports = 0;
    double reference_ohm = 50;
    std::vector<double> frequency_hz;     // strictly ascending
    std::vector<std::vector<Complex>> s;  // for each frequency row-major: S11 S12 ... S21 ...

    // Port numbers from 1, as in the trade's notation.
    Complex at(std::size_t point, std::size_t to, std::size_t from) const {
        return s[point][(to - 1) * ports + (from - 1)];
    }
};

// Both throw BadData. Ports are told by the name's ending (.s2p, .s4p). The first option line
// counts wherever it stands; noise data after two-port data are left aside.
Touchstone read_touchstone(const std::string& path);
Touchstone parse_touchstone(const std::string& text, const std::string& file_name,
                            std::size_t ports);

struct PortPair {
    int plus = 0, minus = 0;
};

// A channel known at some frequencies only.
class MeasuredChannel {
  public:
    // Four ports: differential scattering of the stated pairs, SDD21 = (S31 − S32 − S41 + S42)/2
    // for near 1, 2 and far 3, 4; the reference of the half circuit is the file's. Throws BadData
    // if a pair names a port that is not there or names one twice.
    static MeasuredChannel from_four_ports(const Touchstone& data, PortPair near, PortPair far,
                                           const std::string& file_name);
    // Two ports: the half circuit itself, or with `differential` a pair whose reference is that of
    // both halves together.
    static MeasuredChannel from_two_ports(const Touchstone& data, bool differential,
                                          const std::string& file_name);

    // Between the points: straight lines in the complex plane, with the bulk delay taken out of the
    // transfer meanwhile. Down to direct current: the first two points' line, made real. Beyond the
    // last point: the transfer keeps its delay and loses a1·sqrt(f) + a2·f dB as fitted to the
    // upper half of the points; reflections fall with 1/f.
    Scattering at(double frequency_hz) const;

    double reference_ohm() const { return reference_ohm_; }
    double first_hz() const { return frequency_hz_.front(); }
    double last_hz() const { return frequency_hz_.back(); }
    std::size_t points() const { return frequency_hz_.size(); }
    Complex transfer_at_point(std::size_t point) const;  // as measured, SDD21

  private:
    MeasuredChannel(std::vector<double> frequency_hz, std::vector<Scattering> s,
                    double reference_ohm);
    void fit_loss();
    Scattering beyond_last(double frequency_hz) const;

    std::vector<double> frequency_hz_;
    std::vector<Scattering> s_;  // transfers without their bulk delay
    double reference_ohm_ = 50;
    double delay_s_ = 0;
    double loss_root_db_ = 0, loss_straight_db_ = 0;  // per sqrt(Hz) and per Hz
};

}  // namespace lanewright::sim
