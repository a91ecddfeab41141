#include "tests/adapt/bench_of_one.hpp"

#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>

#include "adapt/stats/random.hpp"

namespace lanewright::tests {
namespace {

Measured plain(double value) {
    return {value, 0, Bound::exact};
}

}  // namespace

Reading BenchOfOne::read(const Request& request) {
    const Truth truth_here = truth(request.codes);
    const auto& wanted = std::get<MarginWanted>(request.what);
    Random random({seed, 0, 0, ordinal++});
    Reading reading;
    if (quantised) {
        const auto steps = [&](double distance, double step, double sigma) {
            return static_cast<std::int32_t>(
                std::lround((distance + sigma * random.normal()) / step));
        };
        LatchedEdges edges;
        edges.up = steps(truth_here.up_mv, monitor.height_step_mv, monitor.height_sigma_mv);
        edges.down = steps(truth_here.down_mv, monitor.height_step_mv, monitor.height_sigma_mv);
        edges.left = steps(truth_here.left_ui, monitor.width_step_ui, monitor.width_sigma_ui);
        edges.right = steps(truth_here.right_ui, monitor.width_step_ui, monitor.width_sigma_ui);
        edges.locked = truth_here.locked;
        reading = latched_reading(monitor, edges, wanted);
    } else {
        reading.error_ratio = wanted.error_ratio;
        reading.status = truth_here.locked ? Status::open : Status::no_lock;
        reading.up_mv = plain(truth_here.up_mv);
        reading.down_mv = plain(truth_here.down_mv);
        reading.left_ui = plain(truth_here.left_ui);
        reading.right_ui = plain(truth_here.right_ui);
    }
    reading.codes = request.codes;
    reading.condition = request.condition;
    return reading;
}

Outcome run(Procedure& procedure, const LaneProblem& problem, BenchOfOne& bench, std::size_t most) {
    Outcome outcome;
    for (;;) {
        const auto requests = procedure.propose(Condition{});
        const auto again = procedure.propose(Condition{});
        REQUIRE(requests.size() == again.size());
        if (requests.empty()) break;
        std::vector<Reading> readings;
        for (std::size_t i = 0; i < requests.size(); ++i) {
            REQUIRE(requests[i].codes == again[i].codes);
            REQUIRE(problem.space->allows(requests[i].codes));
            outcome.asked.push_back(requests[i].codes);
            readings.push_back(bench.read(requests[i]));
        }
        outcome.batches.push_back(requests.size());
        REQUIRE(outcome.asked.size() <= most);
        procedure.observe(readings);
    }
    outcome.decision = procedure.conclude();
    return outcome;
}

CodeSpace equalizer_space(std::vector<Forbidden> forbidden) {
    const auto bank = [](std::string name, Part part, int bits, double first, double last,
                         bool resistor) {
        Dimension dimension;
        dimension.name = std::move(name);
        dimension.part = part;
        dimension.highest = (1 << bits) - 1;
        for (int code = 0; code <= dimension.highest; ++code) {
            const double share = static_cast<double>(code) / dimension.highest;
            // Resistors add in parallel: the conductance is linear in the code.
            dimension.nominal.push_back(resistor ? 1 / (1 / first + share * (1 / last - 1 / first))
                                                 : first + share * (last - first));
        }
        return dimension;
    };
    return CodeSpace({bank("r1", Part::series_resistor, 5, 2200, 150, true),
                      bank("r2", Part::shunt_resistor, 4, 1100, 110, true),
                      bank("c1", Part::series_capacitor, 4, 20e-15, 420e-15, false),
                      bank("c2", Part::shunt_capacitor, 3, 3e-15, 70e-15, false)},
                     std::move(forbidden));
}

CodeSpace plain_space(const std::vector<std::int32_t>& counts, std::vector<Forbidden> forbidden) {
    std::vector<Dimension> dimensions;
    for (std::size_t i = 0; i < counts.size(); ++i) {
        Dimension dimension;
        dimension.name = std::string(1, static_cast<char>('a' + i));
        dimension.highest = counts[i] - 1;
        dimensions.push_back(std::move(dimension));
    }
    return CodeSpace(std::move(dimensions), std::move(forbidden));
}

LaneProblem problem_on(const CodeSpace& space, Codes present, double readings) {
    LaneProblem problem;
    problem.space = &space;
    problem.present = std::move(present);
    problem.required = {1e-6, 40, 0.3};
    problem.reading = {1e-6, 50'000'000};
    problem.cost = {0.001, 0.0001, 1, 25e9};
    problem.budget.standard_readings = readings;
    problem.noise = {2.0, 1.0 / 64, 0, 0};
    return problem;
}

Truth cone(const CodeSpace& space, const Codes& codes, const Codes& best, double height_mv,
           double width_ui, double steepness) {
    double distance = 0;
    for (std::size_t i = 0; i < codes.value.size(); ++i) {
        const auto& dimension = space.dimensions()[i];
        const double range = std::max(1, dimension.highest - dimension.lowest);
        distance += std::abs(codes.value[i] - best.value[i]) / range;
    }
    const double share = 1 - steepness * distance;
    return {height_mv / 2 * share, height_mv / 2 * share, width_ui / 2 * share,
            width_ui / 2 * share, true};
}

}  // namespace lanewright::tests
