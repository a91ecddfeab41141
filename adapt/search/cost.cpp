#include <algorithm>

#include "adapt/search/procedure.hpp"

namespace lanewright {
namespace {

constexpr double looks_of_a_standard_reading = 16;
constexpr double dwell_of_a_standard_reading_s = 0.1;

struct Work {
    double looks = 0, bits = 0;
};

Work work_of(const CostModel& cost, const Request& request) {
    if (const auto* margin = std::get_if<MarginWanted>(&request.what)) {
        const double looks = std::max<std::uint32_t>(cost.looks_per_margin, 1);
        const double dwells = cost.dwell_shared ? 1 : looks;
        return {looks, dwells * static_cast<double>(margin->dwell_bits)};
    }
    Work work;
    for (const auto& look : std::get<LooksWanted>(request.what).looks) {
        work.looks += 1;
        work.bits += static_cast<double>(look.bits);
    }
    return work;
}

double dwell_s(const CostModel& cost, const Work& work) {
    return cost.bit_rate_hz > 0 ? work.bits / cost.bit_rate_hz : 0;
}

double standard_readings_of(const CostModel& cost, const Work& work) {
    return std::max({1.0, work.looks / looks_of_a_standard_reading,
                     dwell_s(cost, work) / dwell_of_a_standard_reading_s});
}

}  // namespace

double cost_s(const CostModel& cost, const Request& request) {
    const Work work = work_of(cost, request);
    return cost.settle_s + request.wait_s + work.looks * cost.per_look_s + dwell_s(cost, work);
}

double standard_readings(const CostModel& cost, const Request& request) {
    return standard_readings_of(cost, work_of(cost, request));
}

double standard_readings(const CostModel& cost, const Request& request, const Reading& reading) {
    if (reading.counts.empty()) return standard_readings(cost, request);
    Work work;
    for (const auto& count : reading.counts) {
        work.looks += 1;
        work.bits += static_cast<double>(count.look.bits);
    }
    return standard_readings_of(cost, work);
}

}  // namespace lanewright
