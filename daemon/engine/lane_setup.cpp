#include "daemon/engine/lane_setup.hpp"

#include <algorithm>
#include <cmath>

namespace lanewright {

namespace {

Part part_of(PartName part) {
    switch (part) {
        case PartName::series_resistor:
            return Part::series_resistor;
        case PartName::series_capacitor:
            return Part::series_capacitor;
        case PartName::shunt_resistor:
            return Part::shunt_resistor;
        case PartName::shunt_capacitor:
            return Part::shunt_capacitor;
        case PartName::other:
            break;
    }
    return Part::other;
}

Dimension dimension_of(const DimensionDescription& described, const RegisterMapDescription& map) {
    Dimension out;
    out.name = described.name;
    out.part = part_of(described.part);
    out.nominal = described.nominal;
    if (const FieldDescription* field = map.find(described.field)) {
        out.lowest = static_cast<std::int32_t>(field->lowest_allowed());
        out.highest = static_cast<std::int32_t>(field->highest_allowed());
    }
    return out;
}

std::size_t index_of(const std::vector<Dimension>& dimensions, const std::string& name) {
    const auto found = std::find_if(dimensions.begin(), dimensions.end(),
                                    [&](const Dimension& d) { return d.name == name; });
    return static_cast<std::size_t>(found - dimensions.begin());
}

bool takes_power_of_two(const BoardFile& board) {
    return std::any_of(board.monitor.sequence.begin(), board.monitor.sequence.end(),
                       [](const Step& step) {
                           const auto* write = std::get_if<WriteStep>(&step);
                           if (write == nullptr) return false;
                           const auto* parameter = std::get_if<Parameter>(&write->value);
                           return parameter != nullptr && *parameter == Parameter::dwell_log2;
                       });
}

}  // namespace

CodeSpace code_space_of(const BoardFile& board) {
    std::vector<Dimension> dimensions;
    for (const DimensionDescription& described : board.dimensions) {
        dimensions.push_back(dimension_of(described, board.map));
    }
    std::vector<Forbidden> forbidden;
    for (const ForbiddenCombination& combination : board.forbidden) {
        Forbidden entry;
        entry.why = combination.why;
        for (const ForbiddenRange& range : combination.all_of) {
            entry.all_of.push_back(
                {index_of(dimensions, range.dimension), range.lowest, range.highest});
        }
        forbidden.push_back(std::move(entry));
    }
    return {std::move(dimensions), std::move(forbidden)};
}

CostModel cost_model_of(const BoardFile& board) {
    return {board.cost.settle_s, board.cost.per_look_s, board.cost.looks_per_margin,
            board.bit_rate_gbps * 1e9, board.monitor.procedure == MonitorProcedure::counted};
}

MonitorNoise monitor_noise_of(const BoardFile& board) {
    const StepSize& height = board.monitor.height;
    const StepSize& width = board.monitor.width;
    if (!counts(board)) return {height.size, width.size, height.sigma, width.sigma};
    // Edges out of counts are finer than a step: there is no quantum.
    MonitorNoise noise;
    noise.height_sigma_mv = height.sigma;
    noise.width_sigma_ui = width.sigma;
    noise.height_nonlinearity_mv = height.nonlinearity_steps * height.size;
    noise.width_nonlinearity_ui = width.nonlinearity_steps * width.size;
    return noise;
}

std::uint64_t dwell_bits_of(const BoardFile& board, const Recipe& recipe) {
    const double bits = std::max(1.0, std::round(recipe.dwell_s * board.bit_rate_gbps * 1e9));
    auto whole = static_cast<std::uint64_t>(bits);
    if (!takes_power_of_two(board)) return whole;
    std::uint64_t power = 1;
    while (power < whole && power < (std::uint64_t{1} << 62)) power <<= 1;
    // Half as long is nearer than twice as long: the recipe's dwell is a wish, not a minimum.
    return static_cast<double>(power) > 1.42 * bits ? power / 2 : power;
}

PreflightSetup preflight_setup_of(const BoardFile& board) {
    const MonitorDescription& monitor = board.monitor;
    PreflightSetup out;
    out.limits = board.preflight.limits;
    out.counted = counts(board);
    out.height_reach_mv = monitor.height.size * monitor.height.most_steps;
    out.least_bits = monitor.counted.least_bits;
    out.most_errors = monitor.counted.most_errors;
    return out;
}

bool counts(const BoardFile& board) {
    return board.monitor.procedure == MonitorProcedure::counted;
}

LaneSetup lane_setup_of(const BoardFile& board, const Recipe& recipe, Lane lane,
                        std::uint64_t seed) {
    LaneSetup setup;
    setup.space = code_space_of(board);
    for (const Dimension& dimension : setup.space.dimensions()) {
        setup.tuned.push_back(std::find(recipe.dimensions.begin(), recipe.dimensions.end(),
                                        dimension.name) != recipe.dimensions.end());
    }
    LaneProblem& problem = setup.problem;
    problem.lane = lane;
    problem.required = recipe.required;
    problem.reading = {recipe.search_error_ratio, dwell_bits_of(board, recipe)};
    problem.cost = cost_model_of(board);
    problem.budget = {recipe.budget.standard_readings, recipe.budget.bench_s};
    problem.noise = monitor_noise_of(board);
    problem.allow_unchanged = recipe.strategy.allow_unchanged;
    problem.stride = recipe.strategy.stride;
    const StrategyEntry* strategy = find_strategy(recipe.strategy.name);
    setup.make = strategy != nullptr ? strategy->make : nullptr;
    setup.seed = seed;
    setup.verify_rounds = recipe.verify_rounds;
    setup.leave = recipe.afterwards == Afterwards::leave;
    setup.preflight = preflight_setup_of(board);
    // The upper half of what the board's ordinal field holds.
    if (board.ordinal) {
        if (const FieldDescription* field = board.map.find(*board.ordinal)) {
            setup.first_side_ordinal = field->highest_allowed() / 2 + 1;
        }
    }
    return setup;
}

std::vector<std::vector<std::uint16_t>> waves_of(const std::vector<std::uint16_t>& lanes) {
    return {lanes};
}

}  // namespace lanewright
