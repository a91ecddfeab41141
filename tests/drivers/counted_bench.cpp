#include "counted_bench.hpp"

#include <algorithm>
#include <cmath>

namespace lanewright::test {

double KnownEye::error_ratio(double offset_mv, double phase_ui) const {
    const double q = std::min({(up_mv - offset_mv) / sigma_mv, (down_mv + offset_mv) / sigma_mv,
                               (left_ui + phase_ui) / sigma_ui, (right_ui - phase_ui) / sigma_ui});
    return 0.5 * std::erfc(q / std::sqrt(2.0));
}

CountedBench::CountedBench() {
    file = small_counted_board();
    for (unsigned lane = 0; lane < 2; ++lane) {
        for (const std::uint32_t address : {at_point, at_count, at_errors, at_bits}) {
            at(address, lane) = 0;
        }
        at(at_origin, lane) = 256 | 64 << 9;
        at(at_tag, lane) = lane;
        scripted.self_clearing.insert(at_count + 0x40 * lane);
    }
    at(at_heat) = 400;
    at(at_guard) = 0;
    scripted.on_write = [this](const DoneWrite& done) { react(done); };
}

void CountedBench::react(const DoneWrite& done) {
    if (before) before(done);
    for (unsigned lane = 0; lane < 2; ++lane) {
        if (done.address == at_count + 0x40 * lane) count(lane);
    }
}

void CountedBench::count(unsigned lane) {
    ++looks;
    const std::uint32_t point = at(at_point, lane), origin = at(at_origin, lane);
    const auto steps = [&](unsigned shift, std::uint32_t mask) {
        return static_cast<double>(point >> shift & mask) -
               static_cast<double>(origin >> shift & mask);
    };
    const std::uint32_t log2 = at(at_setup, lane) & 0x3F;
    const double bits = std::ldexp(1.0, static_cast<int>(log2));
    const double ratio = eye.error_ratio(2 * steps(0, 0x1FF), steps(9, 0x7F) / 64);
    double errors = std::round(ratio * bits);
    if (pattern_errors_exceed_bits) errors = bits + 1;
    const double top = 0xFFFFFF;
    at(at_errors, lane) =
        static_cast<std::uint32_t>(std::min(errors, top)) | (errors >= top ? 0x80000000u : 0u);
    at(at_bits, lane) = log2;
}

Request counted_margin(std::int32_t a, std::int32_t b) {
    Request request;
    request.codes = {{a, b}};
    request.what = MarginWanted{1e-6, std::uint64_t{1} << 31, {}};
    return request;
}

}  // namespace lanewright::test
