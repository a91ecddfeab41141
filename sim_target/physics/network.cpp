#include "sim_target/physics/network.hpp"

#include <numbers>
#include <stdexcept>

namespace lanewright::sim {

namespace {

constexpr double boltzmann_j_per_k = 1.380649e-23;  // exact, SI

}  // namespace

Network::Network(const Grid& grid, std::span<const Chain> source, const Receiver& receiver,
                 const Noise& noise, const std::array<std::vector<double>, bank_count>& factors)
    : grid_(grid), noise_(noise), ideal_input_s_(2.0 / receiver.termination_ohm), code_count_{} {
    const std::size_t points = grid.points();
    if (source.size() != points) throw std::invalid_argument("a chain for each frequency");
    for (std::size_t bank = 0; bank < bank_count; ++bank)
        code_count_[bank] = receiver.banks[bank].codes();

    for (std::size_t k = 0; k < points; ++k) {
        const Complex s{0, 2.0 * std::numbers::pi * grid.frequency_hz(k)};
        // Seen from node a the source is a current 1/b beside an admittance a/b.
        drive_.emplace_back(1.0 / source[k].b);
        input_.emplace_back(source[k].a / source[k].b + 1.0 / receiver.termination_ohm +
                            s * receiver.pad_f);
        output_.emplace_back(s * receiver.load_f +
                             (receiver.load_ohm > 0 ? 1.0 / receiver.load_ohm : 0.0));
    }
    const auto admittance = [&](std::size_t bank, int code, std::size_t k) {
        return bank_admittance(receiver.banks[bank], factors[bank], code, grid.frequency_hz(k));
    };
    const auto fill_series = [&](std::size_t bank, std::vector<std::vector<Series>>& table) {
        table.resize(static_cast<std::size_t>(code_count_[bank]));
        for (int code = 0; code < code_count_[bank]; ++code) {
            for (std::size_t k = 0; k < points; ++k) {
                const BranchAdmittance y = admittance(bank, code, k);
                table[static_cast<std::size_t>(code)].push_back(
                    {Cx(y.first), Cx(y.second), Cx(y.between)});
            }
        }
    };
    // A shunt bank's second node is ground: only its first node counts.
    const auto fill_shunt = [&](std::size_t bank, std::vector<std::vector<Cx>>& table) {
        table.resize(static_cast<std::size_t>(code_count_[bank]));
        for (int code = 0; code < code_count_[bank]; ++code)
            for (std::size_t k = 0; k < points; ++k)
                table[static_cast<std::size_t>(code)].emplace_back(admittance(bank, code, k).first);
    };
    fill_series(bank_r1, r1_);
    fill_series(bank_c1, c1_);
    fill_shunt(bank_r2, r2_);
    fill_shunt(bank_c2, c2_);
}

bool Network::has_codes(std::span<const int> codes) const {
    if (codes.size() != bank_count) return false;
    for (std::size_t bank = 0; bank < bank_count; ++bank)
        if (codes[bank] < 0 || codes[bank] >= code_count_[bank]) return false;
    return true;
}

void Network::solve(std::span<const int> codes, Solution& solution) const {
    const auto code = [&](BankIndex bank) { return static_cast<std::size_t>(codes[bank]); };
    const std::vector<Series>& r1 = r1_[code(bank_r1)];
    const std::vector<Series>& c1 = c1_[code(bank_c1)];
    const std::vector<Cx>& r2 = r2_[code(bank_r2)];
    const std::vector<Cx>& c2 = c2_[code(bank_c2)];
    const std::size_t points = drive_.size();
    solution.transfer.resize(points);
    solution.from_input.resize(points);

    double resistor_sum = 0, input_sum = 0;
    for (std::size_t k = 0; k < points; ++k) {
        const Cx between = r1[k].between + c1[k].between;
        const Cx input = input_[k] + r1[k].first + c1[k].first;
        const Cx output = output_[k] + r1[k].second + c1[k].second + r2[k] + c2[k];
        const Cx scale = inverse(input * output - between * between);
        const Cx from_input = between * scale;
        solution.from_input[k] = from_input;
        solution.transfer[k] = from_input * drive_[k];
        // Half a bin at each end: the trapezoidal rule.
        const double weight = (k == 0 || k + 1 == points) ? 0.5 : 1.0;
        resistor_sum += weight * (input * scale).re;
        input_sum += weight * squared_size(from_input);
    }
    // A passive network at one temperature has noise 4kT·Re(Z) (Nyquist 1928) whatever is inside;
    // the two halves of the pair are independent, so the differential noise power is twice that.
    const double four_kt = 4.0 * boltzmann_j_per_k * noise_.temperature_k;
    solution.resistor_noise_v2 = 2.0 * four_kt * resistor_sum * grid_.step_hz();
    const double current = noise_.input_v_per_root_hz * ideal_input_s_;
    solution.noise_v2 =
        solution.resistor_noise_v2 + current * current * input_sum * grid_.step_hz();
}

}  // namespace lanewright::sim
