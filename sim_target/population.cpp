#include <algorithm>
#include <cmath>
#include <numeric>
#include <stdexcept>

#include "sim_target/physics/keyed_random.hpp"
#include "sim_target/target_link.hpp"

namespace lanewright::sim {

namespace {

// One draw of the population: of a board, or of a lane of it, by what it is for.
enum class Trait : std::uint64_t {
    seed,
    order,
    length,
    impedance,
    loss_tangent,
    swing,
    knee,
    crosstalk,
    package,
    package_ohm,
    ball,
    stub,
    stub_end,
    roughness,
    step,
    step_place,
    file
};

class Draws {
  public:
    Draws(std::uint64_t seed, int board, int lane)
        : seed_(seed), board_(word(board)), lane_(word(lane)) {}

    double uniform(Trait trait, std::uint64_t nth = 0) const {
        KeyedRandom random(seed_, Purpose::population_lane,
                           {board_, lane_, static_cast<std::uint64_t>(trait), nth});
        return random.uniform();
    }
    double inside(Range range, Trait trait, std::uint64_t nth = 0) const {
        return range.from + (range.to - range.from) * uniform(trait, nth);
    }

  private:
    static std::uint64_t word(int value) { return static_cast<std::uint64_t>(value); }
    std::uint64_t seed_, board_, lane_;
};

// Half of the lanes, which half is drawn.
std::vector<bool> outside_lanes(const Population& population, int board) {
    const auto count = static_cast<std::size_t>(population.lanes);
    std::vector<std::size_t> order(count);
    std::iota(order.begin(), order.end(), std::size_t{0});
    std::vector<double> place(count);
    for (std::size_t lane = 0; lane < count; ++lane)
        place[lane] = Draws(population.seed, board, static_cast<int>(lane)).uniform(Trait::order);
    std::sort(order.begin(), order.end(),
              [&](std::size_t a, std::size_t b) { return place[a] < place[b]; });
    // An odd number leaves the odd lane to every second board.
    const std::size_t wanted = (count + static_cast<std::size_t>(board) % 2) / 2;
    std::vector<bool> outside(count);
    for (std::size_t i = 0; i < wanted; ++i) outside[order[i]] = true;
    return outside;
}

PackageLine drawn_package(const Population& population, const Draws& draws, std::uint64_t end) {
    PackageLine package;
    package.length_mm = draws.inside(population.package_mm, Trait::package, end);
    package.impedance_ohm = draws.inside(population.package_ohm, Trait::package_ohm, end);
    package.ball_f = draws.inside(population.ball_f, Trait::ball, end);
    return package;
}

void draw_outside(const Population& population, const Draws& draws, LaneChannel& lane) {
    lane.outside_plain = true;
    if (population.package_mm.to > 0) {
        lane.near_package = drawn_package(population, draws, 0);
        lane.far_package = drawn_package(population, draws, 1);
    }
    if (population.stub_mm.to > 0) {
        Stub stub;
        stub.length_mm = draws.inside(population.stub_mm, Trait::stub);
        (draws.uniform(Trait::stub_end) < 0.5 ? lane.near_stub : lane.far_stub) = stub;
    }
    lane.line.roughness_um = draws.inside(population.roughness_um, Trait::roughness);
    if (population.step_ohm.to > 0) {
        const double place = draws.inside({0.1, 0.9}, Trait::step_place);
        const double change = draws.inside(population.step_ohm, Trait::step);
        const bool up = lane.line.impedance_ohm < 50;
        lane.line.steps = {{place, lane.line.impedance_ohm + (up ? change : -change)}};
    }
    const double file = draws.uniform(Trait::file);
    if (!population.files.empty() && file < 0.25) {
        const auto nth =
            static_cast<std::size_t>(4.0 * file * static_cast<double>(population.files.size()));
        lane.touchstone = population.files[nth];
    }
}

LaneChannel drawn_lane(const Population& population, const LaneChannel& shared, int board,
                       int number, bool outside) {
    const Draws draws(population.seed, board, number);
    LaneChannel lane = shared;
    lane.line.length_mm = draws.inside(population.length_mm, Trait::length);
    lane.line.impedance_ohm = draws.inside(population.impedance_ohm, Trait::impedance);
    lane.line.loss_tangent = draws.inside(population.loss_tangent, Trait::loss_tangent);
    lane.swing_mv = draws.inside(population.swing_mv, Trait::swing);
    if (population.knee_mv.to > 0) lane.knee_mv = draws.inside(population.knee_mv, Trait::knee);
    for (int i = 0; i < population.near_aggressors + population.far_aggressors; ++i) {
        CrosstalkSource source;
        source.far_end = i >= population.near_aggressors;
        source.coupling_db =
            draws.inside(population.crosstalk_db, Trait::crosstalk, static_cast<std::uint64_t>(i));
        lane.crosstalk.push_back(source);
    }
    if (outside) draw_outside(population, draws, lane);
    return lane;
}

// One number is a range of no width.
Range read_range(const Object& from, std::string_view key, Range otherwise, NumberRange limits) {
    const std::optional<Node> node = from.find(key);
    if (!node) return otherwise;
    if (!node->is_list()) {
        const double value = node->number(limits);
        return {value, value};
    }
    const std::vector<double> ends = node->list().numbers(limits);
    if (ends.size() == 2 && ends[0] <= ends[1]) return {ends[0], ends[1]};
    node->complain("no range", "a number, or two numbers, the smaller first");
    return otherwise;
}

Range scaled(Range range, double by) {
    return {range.from * by, range.to * by};
}

}  // namespace

TargetFile population_board(const TargetFile& target, int board) {
    if (!target.population) throw std::out_of_range("this target has no population");
    const Population& population = *target.population;
    if (board < 0 || board >= population.boards) throw std::out_of_range("no such board");
    TargetFile one = target;
    one.board = board;
    KeyedRandom random(population.seed, Purpose::population_board,
                       {static_cast<std::uint64_t>(board)});
    const std::uint64_t upper = random.bits();
    one.seed = (upper << 31U) | (random.bits() >> 1U);
    const std::vector<bool> outside = outside_lanes(population, board);
    one.lanes.clear();
    for (int lane = 0; lane < population.lanes; ++lane)
        one.lanes.push_back(drawn_lane(population, population.shared, board, lane,
                                       outside[static_cast<std::size_t>(lane)]));
    return one;
}

std::string choose_board(TargetFile& target, int board) {
    if (board < 0) return "";
    if (!target.population)
        return "this target has no population, so no board " + std::to_string(board) + " of one";
    if (board >= target.population->boards)
        return "the population has boards 0 to " + std::to_string(target.population->boards - 1) +
               ", not " + std::to_string(board);
    target = population_board(target, board);
    return "";
}

Population read_population(const Object& from, const LaneChannel& shared,
                           const std::string& folder) {
    Population to;
    to.shared = shared;
    to.boards = static_cast<int>(from.integer("boards", {.at_least = 1, .at_most = 10000}));
    to.lanes = static_cast<int>(from.integer("lanes", {.at_least = 1, .at_most = most_lanes}));
    to.seed = static_cast<std::uint64_t>(from.integer_or("seed", 1, {.at_least = 0}));
    const NumberRange ohms{.at_least = 5, .at_most = 500};
    const NumberRange above_zero{.at_most = 5000, .above = 0};
    to.length_mm = read_range(from, "length_mm", to.length_mm, above_zero);
    to.impedance_ohm = read_range(from, "impedance_ohm", to.impedance_ohm, ohms);
    to.loss_tangent =
        read_range(from, "loss_tangent", to.loss_tangent, {.at_least = 0, .at_most = 0.1});
    to.swing_mv = read_range(from, "swing_mv", to.swing_mv, above_zero);
    to.knee_mv = read_range(from, "knee_mv", to.knee_mv, {.at_least = 10, .at_most = 10000});
    to.crosstalk_db =
        read_range(from, "crosstalk_db", to.crosstalk_db, {.at_least = -120, .at_most = -6});
    to.near_aggressors =
        static_cast<int>(from.integer_or("near_aggressors", 0, {.at_least = 0, .at_most = 4}));
    to.far_aggressors =
        static_cast<int>(from.integer_or("far_aggressors", 0, {.at_least = 0, .at_most = 4}));
    if (const auto outside = from.object_if("outside")) {
        to.package_mm =
            read_range(*outside, "package_mm", to.package_mm, {.at_most = 200, .above = 0});
        to.package_ohm = read_range(*outside, "package_ohm", to.package_ohm, ohms);
        to.ball_f = scaled(
            read_range(*outside, "ball_ff", {0, 0}, {.at_least = 0, .at_most = 10000}), 1e-15);
        to.stub_mm = read_range(*outside, "stub_mm", to.stub_mm, {.at_most = 50, .above = 0});
        to.roughness_um =
            read_range(*outside, "roughness_um", to.roughness_um, {.at_least = 0, .at_most = 20});
        to.step_ohm = read_range(*outside, "step_ohm", to.step_ohm, {.at_least = 0, .at_most = 30});
        if (const auto files = outside->find("touchstone"))
            for (const Node file : files->list())
                to.files.push_back(read_touchstone_channel(file.object(), folder));
        outside->finish();
    }
    from.finish();
    return to;
}

}  // namespace lanewright::sim
