#include <algorithm>
#include <cmath>
#include <numbers>
#include <set>

#include "sim_target/physics/touchstone.hpp"

namespace lanewright::sim {

namespace {

constexpr double two_pi = 2.0 * std::numbers::pi;
// Below this a transfer is lost in any instrument's noise; it keeps chain parameters finite.
constexpr double least_transfer = 1e-9;

Complex turned(double frequency_hz, double delay_s) {
    return std::polar(1.0, two_pi * frequency_hz * delay_s);
}

// Slope of the unwrapped phase by least squares, as a delay.
double bulk_delay_s(const std::vector<double>& frequency_hz, const std::vector<Scattering>& s) {
    double phase = std::arg(s.front().s21);
    double sum_f = 0, sum_p = 0, sum_ff = 0, sum_fp = 0;
    for (std::size_t i = 0; i < s.size(); ++i) {
        if (i > 0 && std::abs(s[i].s21) > 0 && std::abs(s[i - 1].s21) > 0)
            phase += std::arg(s[i].s21 / s[i - 1].s21);
        const double f = frequency_hz[i] / frequency_hz.back();
        sum_f += f;
        sum_p += phase;
        sum_ff += f * f;
        sum_fp += f * phase;
    }
    const double n = static_cast<double>(s.size());
    const double spread = sum_ff - sum_f * sum_f / n;
    const double slope = (sum_fp - sum_f * sum_p / n) / spread;
    return std::max(0.0, -slope / (two_pi * frequency_hz.back()));
}

Complex mixed(Complex a, Complex b, double share) {
    return a + share * (b - a);
}

Scattering mixed(const Scattering& a, const Scattering& b, double share) {
    return {mixed(a.s11, b.s11, share), mixed(a.s12, b.s12, share), mixed(a.s21, b.s21, share),
            mixed(a.s22, b.s22, share)};
}

// A real network has real scattering at direct current, and a passive one no more than 1.
Complex at_zero(Complex first, Complex second, double first_hz, double second_hz) {
    const double line =
        first.real() - first_hz * (second.real() - first.real()) / (second_hz - first_hz);
    return {std::clamp(line, -1.0, 1.0), 0.0};
}

void keep_above_zero(Complex& transfer) {
    if (!(std::abs(transfer) >= least_transfer)) transfer = least_transfer;
}

}  // namespace

MeasuredChannel::MeasuredChannel(std::vector<double> frequency_hz, std::vector<Scattering> s,
                                 double reference_ohm)
    : frequency_hz_(std::move(frequency_hz)), s_(std::move(s)), reference_ohm_(reference_ohm) {
    delay_s_ = bulk_delay_s(frequency_hz_, s_);
    for (std::size_t i = 0; i < s_.size(); ++i) {
        s_[i].s21 *= turned(frequency_hz_[i], delay_s_);
        s_[i].s12 *= turned(frequency_hz_[i], delay_s_);
    }
    fit_loss();
}

// Least squares of a1·sqrt(f) + a2·f + constant on the upper half; a coefficient that would make
// the loss fall with frequency is left out.
void MeasuredChannel::fit_loss() {
    double g11 = 0, g12 = 0, g22 = 0, r1 = 0, r2 = 0, mean_root = 0, mean_f = 0, mean_db = 0;
    const std::size_t from = s_.size() / 2;
    const double n = static_cast<double>(s_.size() - from);
    const auto loss_db = [&](std::size_t i) {
        return -20.0 * std::log10(std::max(least_transfer, std::abs(s_[i].s21)));
    };
    const auto share = [&](std::size_t i) { return frequency_hz_[i] / frequency_hz_.back(); };
    for (std::size_t i = from; i < s_.size(); ++i) {
        mean_root += std::sqrt(share(i)) / n;
        mean_f += share(i) / n;
        mean_db += loss_db(i) / n;
    }
    for (std::size_t i = from; i < s_.size(); ++i) {
        const double x = std::sqrt(share(i)) - mean_root;
        const double y = share(i) - mean_f;
        const double z = loss_db(i) - mean_db;
        g11 += x * x;
        g12 += x * y;
        g22 += y * y;
        r1 += x * z;
        r2 += y * z;
    }
    const double determinant = g11 * g22 - g12 * g12;
    double root = 0, straight = 0;
    if (determinant > 1e-9 * g11 * g22) {
        root = (r1 * g22 - r2 * g12) / determinant;
        straight = (g11 * r2 - g12 * r1) / determinant;
    }
    if (root < 0 || straight < 0 || determinant <= 1e-9 * g11 * g22) {
        straight = 0;
        root = g11 > 0 ? std::max(0.0, r1 / g11) : 0.0;
    }
    loss_root_db_ = root / std::sqrt(frequency_hz_.back());
    loss_straight_db_ = straight / frequency_hz_.back();
}

Scattering MeasuredChannel::beyond_last(double frequency_hz) const {
    const double last = frequency_hz_.back();
    Scattering s = s_.back();
    const double more_db = loss_root_db_ * (std::sqrt(frequency_hz) - std::sqrt(last)) +
                           loss_straight_db_ * (frequency_hz - last);
    const double factor = std::pow(10.0, -more_db / 20.0);
    s.s21 *= factor;
    s.s12 *= factor;
    s.s11 *= last / frequency_hz;
    s.s22 *= last / frequency_hz;
    return s;
}

Scattering MeasuredChannel::at(double frequency_hz) const {
    Scattering s;
    if (frequency_hz >= frequency_hz_.back()) {
        s = beyond_last(frequency_hz);
    } else if (frequency_hz < frequency_hz_.front()) {
        const double f0 = frequency_hz_[0], f1 = frequency_hz_[1];
        const Scattering zero{
            at_zero(s_[0].s11, s_[1].s11, f0, f1), at_zero(s_[0].s12, s_[1].s12, f0, f1),
            at_zero(s_[0].s21, s_[1].s21, f0, f1), at_zero(s_[0].s22, s_[1].s22, f0, f1)};
        s = mixed(zero, s_[0], frequency_hz / f0);
    } else {
        const auto above =
            std::upper_bound(frequency_hz_.begin(), frequency_hz_.end(), frequency_hz);
        const auto i = static_cast<std::size_t>(above - frequency_hz_.begin());
        const double f0 = frequency_hz_[i - 1], f1 = frequency_hz_[i];
        s = mixed(s_[i - 1], s_[i], (frequency_hz - f0) / (f1 - f0));
    }
    s.s21 *= turned(frequency_hz, -delay_s_);
    s.s12 *= turned(frequency_hz, -delay_s_);
    keep_above_zero(s.s21);
    keep_above_zero(s.s12);
    return s;
}

Complex MeasuredChannel::transfer_at_point(std::size_t point) const {
    return s_[point].s21 * turned(frequency_hz_[point], -delay_s_);
}

MeasuredChannel MeasuredChannel::from_four_ports(const Touchstone& data, PortPair near,
                                                 PortPair far, const std::string& file_name) {
    const std::set<int> named{near.plus, near.minus, far.plus, far.minus};
    if (data.ports != 4 || named.size() != 4 || *named.begin() < 1 || *named.rbegin() > 4)
        throw BadData(file_name + ":0: a differential channel needs four ports, each in one pair");
    const auto mode = [&](std::size_t point, PortPair to, PortPair from) {
        const auto at = [&](int i, int j) {
            return data.at(point, static_cast<std::size_t>(i), static_cast<std::size_t>(j));
        };
        return 0.5 * (at(to.plus, from.plus) - at(to.plus, from.minus) - at(to.minus, from.plus) +
                      at(to.minus, from.minus));
    };
    std::vector<Scattering> s(data.frequency_hz.size());
    for (std::size_t i = 0; i < s.size(); ++i)
        s[i] = {mode(i, near, near), mode(i, near, far), mode(i, far, near), mode(i, far, far)};
    return {data.frequency_hz, std::move(s), data.reference_ohm};
}

MeasuredChannel MeasuredChannel::from_two_ports(const Touchstone& data, bool differential,
                                                const std::string& file_name) {
    if (data.ports != 2) throw BadData(file_name + ":0: two ports are needed");
    std::vector<Scattering> s(data.frequency_hz.size());
    for (std::size_t i = 0; i < s.size(); ++i)
        s[i] = {data.at(i, 1, 1), data.at(i, 1, 2), data.at(i, 2, 1), data.at(i, 2, 2)};
    return {data.frequency_hz, std::move(s),
            differential ? data.reference_ohm / 2 : data.reference_ohm};
}

}  // namespace lanewright::sim
