#include "sim_target/physics/bank.hpp"

#include <algorithm>
#include <numbers>

#include "sim_target/physics/keyed_random.hpp"

namespace lanewright::sim {

namespace {

// From the first node through `branch` to an inner node, from there through `gate` to the second;
// `plate` to ground at the first and at the inner node.
BranchAdmittance behind_switch(Complex branch, Complex plate, Complex gate) {
    const Complex inner = branch + plate + gate;
    return {plate + branch - branch * branch / inner, gate - gate * gate / inner,
            branch * gate / inner};
}

}  // namespace

std::vector<double> element_factors(const BankSpec& spec, std::uint64_t seed, int lane, int bank) {
    std::vector<double> factors;
    for (int element = 0; element <= spec.bits; ++element) {
        KeyedRandom random(seed, Purpose::element_error,
                           {static_cast<std::uint64_t>(lane), static_cast<std::uint64_t>(bank),
                            static_cast<std::uint64_t>(element)});
        const double size =
            element == 0 ? spec.fixed : spec.unit * static_cast<double>(1 << (element - 1));
        const bool small = spec.kind == BankKind::capacitor && size < spec.small_below;
        const double sigma = small ? spec.small_error_sigma : spec.error_sigma;
        factors.push_back(std::max(0.2, 1.0 + sigma * random.normal()));
    }
    return factors;
}

BranchAdmittance bank_admittance(const BankSpec& spec, const std::vector<double>& factors, int code,
                                 double frequency_hz) {
    const Complex s{0, 2.0 * std::numbers::pi * frequency_hz};
    const bool resistor = spec.kind == BankKind::resistor;
    BranchAdmittance sum;
    for (int element = 0; element <= spec.bits; ++element) {
        const double weight = element == 0 ? 1.0 : static_cast<double>(1 << (element - 1));
        const double size = element == 0 ? spec.fixed : spec.unit;
        const double factor = factors.empty() ? 1.0 : factors[static_cast<std::size_t>(element)];
        const Complex branch =
            resistor ? Complex(weight / (size * factor)) : s * (size * factor * weight);
        const Complex plate = resistor ? Complex(0) : spec.plate_share * branch;
        if (element == 0 || (((code >> (element - 1)) & 1) != 0 && spec.switch_ohm <= 0)) {
            sum.first += branch + plate;
            sum.second += branch + plate;
            sum.between += branch;
            continue;
        }
        const bool closed = ((code >> (element - 1)) & 1) != 0;
        const Complex gate =
            closed ? Complex(weight / spec.switch_ohm) : s * (spec.switch_off_f * weight);
        // At direct current an open capacitor hangs on nothing at all.
        if (branch + plate + gate == Complex(0)) continue;
        const BranchAdmittance part = behind_switch(branch, plate, gate);
        sum.first += part.first;
        sum.second += part.second;
        sum.between += part.between;
    }
    return sum;
}

std::vector<double> nominal_table(const BankSpec& spec) {
    std::vector<double> table;
    for (int code = 0; code < spec.codes(); ++code) {
        const double weight = code;
        if (spec.kind == BankKind::resistor)
            table.push_back(1.0 / (1.0 / spec.fixed + weight / (spec.unit + spec.switch_ohm)));
        else
            table.push_back(spec.fixed + weight * spec.unit);
    }
    return table;
}

}  // namespace lanewright::sim
