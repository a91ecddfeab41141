#include "tests/bench/truth_bench.hpp"

#include <algorithm>
#include <stdexcept>
#include <string>

#include "adapt/margin/latched.hpp"

namespace lanewright::bench {

namespace {

// The oracle climbs from the best of a screening; codes this much better than its best would show
// that it missed some.
constexpr double oracle_tolerance = 0.002;

template <class File>
File usable(std::optional<File> file, const Complaints& complaints) {
    if (!file) throw std::runtime_error(complaints.text());
    return std::move(*file);
}

MonitorGrid monitor_grid_of(const BoardFile& board) {
    const MonitorDescription& monitor = board.monitor;
    return {monitor.height.size,      monitor.width.size,   monitor.height.most_steps,
            monitor.width.most_steps, monitor.height.sigma, monitor.width.sigma};
}

}  // namespace

DemoFiles load_demo_files() {
    const std::string folder = LANEWRIGHT_SOURCE_DIR "/configs/";
    Complaints complaints;
    return {usable(load_board_file(folder + "boards/demo.json", complaints), complaints),
            usable(load_recipe(folder + "recipes/demo.json", complaints), complaints),
            usable(sim::load_target(folder + "targets/demo.json", complaints), complaints)};
}

TruthLane::TruthLane(const DemoFiles& files, int lane, unsigned threads)
    : files_(files), oracle_(files.target, lane) {
    for (const std::string_view name : sim::dimension_names()) {
        const auto& dimensions = files.board.dimensions;
        const auto found = std::find_if(dimensions.begin(), dimensions.end(),
                                        [&](const auto& each) { return each.name == name; });
        if (found == dimensions.end()) {
            throw std::runtime_error("the board file has no dimension " + std::string(name));
        }
        dimension_of_bank_.push_back(static_cast<std::size_t>(found - dimensions.begin()));
    }
    const Required& required = files.recipe.required;
    required_ = {required.height_mv, required.width_ui, required.error_ratio};
    best_score_ = sim::best_codes(oracle_, required_, threads).score;
}

std::vector<int> TruthLane::target_order(const Codes& codes) const {
    std::vector<int> ordered;
    for (const std::size_t dimension : dimension_of_bank_) {
        ordered.push_back(codes.value.at(dimension));
    }
    return ordered;
}

Codes TruthLane::reset_codes() const {
    Codes codes;
    codes.value.resize(files_.board.dimensions.size());
    for (std::size_t i = 0; i < dimension_of_bank_.size(); ++i) {
        codes.value.at(dimension_of_bank_[i]) = files_.target.reset_codes.at(i);
    }
    return codes;
}

Reading TruthLane::read(const Request& request, std::uint64_t seed, std::uint32_t ordinal) const {
    const auto& wanted = std::get<MarginWanted>(request.what);
    const sim::LatchedEdges steps =
        sim::latched_reading(oracle_, target_order(request.codes), wanted.error_ratio,
                             wanted.dwell_bits, seed, oracle_.lane(), ordinal);
    Reading reading = latched_reading(
        monitor_grid_of(files_.board),
        LatchedEdges{steps.up, steps.down, steps.left, steps.right, steps.locked}, wanted);
    reading.codes = request.codes;
    reading.condition = request.condition;
    reading.error_definition = files_.board.monitor.error_definition == "decision"
                                   ? ErrorDefinition::decision
                                   : ErrorDefinition::pattern;
    reading.cost_s = cost_s(cost_model_of(files_.board), request);
    return reading;
}

double TruthLane::true_score(const Codes& codes) const {
    return sim::score(oracle_.margins(target_order(codes), required_.error_ratio), required_);
}

SearchResult run_search(const DemoFiles& files, const TruthLane& lane, std::string_view strategy,
                        std::uint64_t seed) {
    const StrategyEntry* entry = find_strategy(strategy);
    if (entry == nullptr) throw std::runtime_error("no strategy " + std::string(strategy));
    const Lane number{static_cast<std::uint16_t>(lane.lane())};
    LaneSetup setup = lane_setup_of(files.board, files.recipe, number, seed);
    setup.problem.space = &setup.space;
    setup.problem.present = lane.reset_codes();
    const auto procedure =
        entry->make(setup.problem, {}, RandomKey{seed, lanewright::number(number), 1, 0});

    std::uint32_t ordinal = 0;
    for (auto requests = procedure->propose({}); !requests.empty();
         requests = procedure->propose({})) {
        std::vector<Reading> readings;
        for (const Request& request : requests) {
            readings.push_back(lane.read(request, seed, ordinal++));
        }
        if (ordinal > files.recipe.budget.standard_readings) {
            throw std::runtime_error(std::string(strategy) + " exceeds its budget");
        }
        procedure->observe(readings);
    }
    SearchResult result;
    result.decision = procedure->conclude();
    result.attainment = lane.true_score(result.decision.codes) / lane.best_score();
    result.impossible = !(result.attainment <= 1 + oracle_tolerance);
    return result;
}

}  // namespace lanewright::bench
