#include "daemon/engine/edge_statistics.hpp"

#include <algorithm>
#include <array>
#include <cmath>

#include "adapt/search/text.hpp"
#include "adapt/stats/normal.hpp"
#include "adapt/stats/tails.hpp"

namespace lanewright {

namespace {

struct Edge {
    const char* name;
    const char* words;
    bool vertical, opening;
    std::optional<Measured> Reading::* member;
};
constexpr std::array<Edge, 6> edges{{{"up_mv", "up edge", true, false, &Reading::up_mv},
                                     {"down_mv", "down edge", true, false, &Reading::down_mv},
                                     {"left_ui", "left edge", false, false, &Reading::left_ui},
                                     {"right_ui", "right edge", false, false, &Reading::right_ui},
                                     {"height_mv", "height", true, true, &Reading::height_mv},
                                     {"width_ui", "width", false, true, &Reading::width_ui}}};

const Edge* edge_called(const std::string& name) {
    const auto found = std::find_if(edges.begin(), edges.end(),
                                    [&](const Edge& edge) { return name == edge.name; });
    return found == edges.end() ? nullptr : &*found;
}

bool plain(const Reading& reading, const Edge& edge) {
    const std::optional<Measured>& measured = reading.*edge.member;
    return measured && measured->bound == Bound::exact && std::isfinite(measured->value);
}

std::string variance_name(const Edge& edge) {
    return std::string(edge.name) + "_variance";
}

// How far the reading at `index` lies from the mean of the others, in their standard deviations.
double distance_from_others(std::span<const Reading> readings, std::size_t index,
                            const MonitorNoise& declared) {
    std::vector<Reading> others;
    for (std::size_t i = 0; i < readings.size(); ++i) {
        if (i != index) others.push_back(readings[i]);
    }
    double farthest = 0;
    for (const EdgeStatistics& of_others : edge_statistics(others)) {
        const Edge& edge = *edge_called(of_others.name);
        if (!plain(readings[index], edge)) return HUGE_VAL;
        const double step = edge.vertical ? declared.height_step_mv : declared.width_step_ui;
        const double sigma = edge.vertical ? declared.height_sigma_mv : declared.width_sigma_ui;
        const double scale = std::max({std::sqrt(of_others.variance()), step, sigma, 1e-12});
        const double distance = (readings[index].*edge.member)->value - of_others.mean;
        farthest = std::max(farthest, std::abs(distance) / scale);
    }
    return farthest;
}

}  // namespace

std::vector<EdgeStatistics> edge_statistics(std::span<const Reading> readings) {
    std::vector<EdgeStatistics> out;
    for (const Edge& edge : edges) {
        EdgeStatistics each{edge.name, edge.vertical, edge.opening, 0, 0, 0};
        const bool all =
            !readings.empty() && std::all_of(readings.begin(), readings.end(), [&](const auto& r) {
                return r.status == Status::open && plain(r, edge);
            });
        if (!all) continue;
        for (const Reading& reading : readings) {  // Welford, Technometrics 4, 419-420, 1962
            const double value = (reading.*edge.member)->value;
            const double off = value - each.mean;
            each.mean += off / static_cast<double>(++each.count);
            each.deviations += off * (value - each.mean);
        }
        out.push_back(each);
    }
    return out;
}

Kept without_strays(std::span<const Reading> readings, const MonitorNoise& declared) {
    constexpr double far = 6;
    Kept out{{readings.begin(), readings.end()}, 0};
    const std::size_t allowed = (readings.size() + 9) / 10;
    while (out.left_out < allowed && out.readings.size() > 3) {
        std::size_t worst = 0;
        double distance = 0;
        for (std::size_t i = 0; i < out.readings.size(); ++i) {
            const double d = distance_from_others(out.readings, i, declared);
            if (d > distance) {
                distance = d;
                worst = i;
            }
        }
        if (distance <= far) break;
        out.readings.erase(out.readings.begin() + static_cast<std::ptrdiff_t>(worst));
        ++out.left_out;
    }
    return out;
}

Sigma pooled_sigma(const std::vector<EdgeStatistics>& all, bool vertical, double step) {
    double sum = 0, degrees = 0;
    for (const EdgeStatistics& edge : all) {
        if (edge.vertical != vertical || edge.count < 2) continue;
        const auto own = static_cast<double>(edge.count - 1);
        // An opening is one count, so its step enters once; its noise is that of two edges.
        const double variance = std::max(0.0, edge.variance() - step * step / 12);
        sum += own * (edge.opening ? variance / 2 : variance);
        degrees += own;
    }
    return {degrees > 0 ? std::sqrt(sum / degrees) : 0, degrees};
}

double larger_spread_chance(double sum_of_squares, double degrees, double sigma) {
    if (degrees <= 0) return 1;
    if (sigma <= 0) return sum_of_squares > 0 ? 0 : 1;
    return gamma_q(degrees / 2, sum_of_squares / (2 * sigma * sigma));
}

std::map<std::string, double> values_of(const std::vector<EdgeStatistics>& all) {
    std::map<std::string, double> out;
    for (const EdgeStatistics& edge : all) {
        out[edge.name] = edge.mean;
        out[edge.name + "_variance"] = edge.variance();
        out["reading_count"] = static_cast<double>(edge.count);
    }
    return out;
}

std::vector<EdgeStatistics> edges_from(const std::map<std::string, double>& values) {
    std::vector<EdgeStatistics> out;
    const auto count = values.find("reading_count");
    if (count == values.end() || count->second < 1) return out;
    for (const Edge& edge : edges) {
        const auto mean = values.find(edge.name);
        const auto variance = values.find(variance_name(edge));
        if (mean == values.end() || variance == values.end()) continue;
        out.push_back({edge.name, edge.vertical, edge.opening,
                       static_cast<std::size_t>(count->second), mean->second,
                       variance->second * (count->second - 1)});
    }
    return out;
}

std::optional<EdgeShift> significant_shift(const Reading& before, const Reading& now,
                                           const MonitorNoise& noise, bool latched) {
    const auto seen = [](const Reading& reading) {
        return reading.status == Status::open || reading.status == Status::saturated;
    };
    if (!seen(before)) return std::nullopt;
    EdgeShift worst;
    const bool closed = !seen(now);
    // Noise alone takes a counted eye that is hardly open across the boundary. Its vertical edges
    // go on below zero there, so they say by how much; its horizontal ones change their meaning.
    const auto goes_on = [&](const Edge& edge) {
        return now.status == Status::closed && !latched && edge.vertical && !edge.opening &&
               plain(before, edge) && plain(now, edge);
    };
    worst.gone = closed && std::none_of(edges.begin(), edges.end(), goes_on);
    if (worst.gone) return worst;
    std::size_t compared = 0;
    for (const Edge& edge : edges) {
        if (closed && !goes_on(edge)) continue;
        if (!plain(before, edge) || !plain(now, edge)) continue;
        ++compared;
        const double step =
            latched ? (edge.vertical ? noise.height_step_mv : noise.width_step_ui) : 0;
        const double sigma = edge.vertical ? noise.height_sigma_mv : noise.width_sigma_ui;
        const auto variance_of = [&](const Measured& measured) {
            const double spread = (edge.opening ? 2 : 1) * sigma * sigma + step * step / 12;
            return latched ? spread : std::max(spread, measured.std_error * measured.std_error);
        };
        const double both = variance_of(*(before.*edge.member)) + variance_of(*(now.*edge.member));
        const double was = (before.*edge.member)->value, is = (now.*edge.member)->value;
        const double apart = std::abs(is - was) / std::sqrt(std::max(both, 1e-24));
        if (apart > worst.standard_errors) worst = {edge.name, was, is, apart, false};
    }
    if (compared == 0) return std::nullopt;
    const double limit = normal_q(0.025 / static_cast<double>(compared));
    if (worst.standard_errors <= limit) return std::nullopt;
    return worst;
}

std::string text_of(const EdgeShift& shift) {
    if (shift.gone) return "the eye was open and is not any more";
    const Edge* edge = edge_called(shift.edge);
    const bool vertical = edge != nullptr && edge->vertical;
    const char* unit = vertical ? " mV" : " UI";
    const int digits = vertical ? 1 : 3;
    return std::string("the ") + (edge != nullptr ? edge->words : "edge") + " from " +
           fixed(shift.before, digits) + " to " + fixed(shift.now, digits) + unit + ", " +
           fixed(shift.standard_errors, 1) + " standard errors";
}

}  // namespace lanewright
