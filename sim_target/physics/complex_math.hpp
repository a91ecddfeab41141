#pragma once
// Purpose:   complex numbers without the checks for infinities that std::complex's product and
//            quotient carry: the network is solved 40 million times in a full sweep.
// Ownership: values only.
// Threads:   no shared state.

#include <complex>

namespace lanewright::sim {

struct Cx {
    double re = 0, im = 0;

    Cx() = default;
    Cx(double real, double imaginary) : re(real), im(imaginary) {}
    explicit Cx(std::complex<double> value) : re(value.real()), im(value.imag()) {}
    std::complex<double> standard() const { return {re, im}; }
    Cx& operator+=(Cx other) {
        re += other.re;
        im += other.im;
        return *this;
    }
};

inline Cx operator+(Cx a, Cx b) {
    return {a.re + b.re, a.im + b.im};
}
inline Cx operator-(Cx a, Cx b) {
    return {a.re - b.re, a.im - b.im};
}
inline Cx operator*(Cx a, Cx b) {
    return {a.re * b.re - a.im * b.im, a.re * b.im + a.im * b.re};
}
inline Cx operator*(double a, Cx b) {
    return {a * b.re, a * b.im};
}
inline double squared_size(Cx a) {
    return a.re * a.re + a.im * a.im;
}
inline Cx inverse(Cx a) {
    const double scale = 1.0 / squared_size(a);
    return {a.re * scale, -a.im * scale};
}

}  // namespace lanewright::sim
