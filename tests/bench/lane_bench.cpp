#include "tests/bench/lane_bench.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <stdexcept>

#include "adapt/margin/edge_search.hpp"
#include "adapt/margin/latched.hpp"
#include "adapt/search/score.hpp"
#include "drivers/board/counted_look.hpp"
#include "sim_target/monitor/monitored_lane.hpp"
#include "sim_target/truth_cache.hpp"

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

ErrorDefinition definition_of(const BoardFile& board) {
    return board.monitor.error_definition == "decision" ? ErrorDefinition::decision
                                                        : ErrorDefinition::pattern;
}

int whole_steps(double distance, double step) {
    return static_cast<int>(std::lround(distance / step));
}

}  // namespace

const char* name_of(Reader reader) {
    return reader == Reader::latched ? "latched" : "counted";
}

BenchFiles load_bench_files(const std::string& target, std::uint64_t seed) {
    const std::string folder = LANEWRIGHT_SOURCE_DIR "/configs/";
    Complaints complaints;
    BenchFiles files{
        usable(load_board_file(folder + "boards/demo.json", complaints), complaints),
        usable(load_board_file(folder + "boards/demo_counted.json", complaints), complaints),
        usable(load_recipe(folder + "recipes/demo.json", complaints), complaints),
        usable(sim::load_target(folder + "targets/" + target, complaints), complaints)};
    if (!files.target.population) throw std::runtime_error(target + " has no population");
    files.target.population->seed = seed;
    // What the population is meant to be judged by, for strategies and oracle alike.
    const sim::Required& required = files.target.required;
    files.recipe.required = {required.error_ratio, required.height_mv, required.width_ui};
    files.recipe.search_error_ratio = required.error_ratio;
    return files;
}

struct BenchLane::Parts {
    sim::TargetFile target;
    sim::Oracle oracle;
    sim::Required required;

    Parts(sim::TargetFile board, int lane) : target(std::move(board)), oracle(target, lane) {}
};

BenchLane::BenchLane(const BenchFiles& files, int board, int lane, unsigned threads)
    : files_(&files),
      lane_(lane),
      parts_(std::make_unique<Parts>(sim::population_board(files.target, board), lane)) {
    for (const std::string_view name : sim::dimension_names()) {
        const auto& dimensions = files.latched.dimensions;
        const auto found = std::find_if(dimensions.begin(), dimensions.end(),
                                        [&](const auto& each) { return each.name == name; });
        if (found == dimensions.end()) {
            throw std::runtime_error("the board file has no dimension " + std::string(name));
        }
        dimension_of_bank_.push_back(static_cast<std::size_t>(found - dimensions.begin()));
    }
    const Required& required = files.recipe.required;
    parts_->required = {required.height_mv, required.width_ui, required.error_ratio};
    const sim::CodesScore best = sim::kept_best_codes(
        parts_->oracle, parts_->target, parts_->required, threads, sim::default_truth_folder());
    best_score_ = best.score;
    best_codes_ = board_order(best.codes);
}

BenchLane::~BenchLane() = default;
BenchLane::BenchLane(BenchLane&&) noexcept = default;
BenchLane& BenchLane::operator=(BenchLane&&) noexcept = default;

std::vector<int> BenchLane::target_order(const Codes& codes) const {
    std::vector<int> ordered;
    for (const std::size_t dimension : dimension_of_bank_) {
        ordered.push_back(codes.value.at(dimension));
    }
    return ordered;
}

Codes BenchLane::board_order(const std::vector<int>& codes) const {
    Codes ordered;
    ordered.value.resize(files_->latched.dimensions.size());
    for (std::size_t i = 0; i < dimension_of_bank_.size(); ++i) {
        ordered.value.at(dimension_of_bank_[i]) = codes.at(i);
    }
    return ordered;
}

Codes BenchLane::reset_codes() const {
    return board_order(parts_->target.reset_codes);
}

double BenchLane::true_score(const Codes& codes) const {
    const sim::Required& required = parts_->required;
    return sim::score(parts_->oracle.margins(target_order(codes), required.error_ratio), required);
}

bool BenchLane::outside_plain() const {
    return parts_->target.lanes.at(static_cast<std::size_t>(lane_)).outside_plain;
}

const sim::Oracle& BenchLane::oracle() const {
    return parts_->oracle;
}

const sim::TargetFile& BenchLane::target() const {
    return parts_->target;
}

struct ReadLane::Parts {
    sim::MonitoredLane monitor;
    LookScale scale;

    Parts(const BenchLane& lane, const BoardFile& board)
        : monitor(lane.target(), lane.lane()), scale(board) {}
};

ReadLane::ReadLane(const BenchLane& lane, Reader reader)
    : lane_(lane),
      reader_(reader),
      parts_(std::make_unique<Parts>(lane, lane.files().board(reader))) {}

ReadLane::~ReadLane() = default;

Reading ReadLane::read(const Request& request) {
    parts_->monitor.number(ordinal_++);
    const bool locked = parts_->monitor.put(lane_.target_order(request.codes), true);
    Reading reading;
    if (!locked) {
        reading.status = Status::no_lock;
        reading.error_ratio = std::get<MarginWanted>(request.what).error_ratio;
        reading.cost_s = lane_.files().board(reader_).cost.settle_s;
    } else {
        reading = reader_ == Reader::latched ? latched(request) : counted(request);
    }
    reading.codes = request.codes;
    reading.condition = request.condition;
    reading.error_definition = definition_of(lane_.files().board(reader_));
    return reading;
}

Reading ReadLane::latched(const Request& request) {
    const BoardFile& board = lane_.files().latched;
    const auto& wanted = std::get<MarginWanted>(request.what);
    const sim::LatchedEdges steps =
        parts_->monitor.latch(sim::LookTime{}, wanted.error_ratio, wanted.dwell_bits);
    Reading reading =
        latched_reading(monitor_grid_of(board),
                        LatchedEdges{steps.up, steps.down, steps.left, steps.right, true}, wanted);
    reading.bit_count = wanted.dwell_bits;
    reading.cost_s = cost_s(cost_model_of(board), request);
    return reading;
}

Reading ReadLane::counted(const Request& request) {
    const BoardFile& board = lane_.files().counted;
    const sim::MonitorPoint origin = parts_->monitor.origin();
    LookScale& scale = parts_->scale;
    const auto set =
        scale.set_origin(static_cast<std::uint32_t>(board.monitor.height.centre + origin.offset),
                         static_cast<std::uint32_t>(board.monitor.width.centre + origin.phase));
    if (!set) throw std::runtime_error(set.error().text());
    EdgeSearch search(std::get<MarginWanted>(request.what), scale.grid());
    double cost = board.cost.settle_s;
    std::uint64_t bits = 0;
    for (auto looks = search.next(board.monitor.counted.looks_a_batch); !looks.empty();
         looks = search.next(board.monitor.counted.looks_a_batch)) {
        std::vector<Count> counts;
        for (const Look& wanted : looks) {
            const Look look = scale.placed(wanted);
            const sim::MonitorPoint point{
                origin.offset + whole_steps(look.offset_mv, board.monitor.height.size),
                origin.phase + whole_steps(look.phase_ui, board.monitor.width.size)};
            const auto log2 = static_cast<unsigned>(std::lround(std::log2(look.bits)));
            const sim::CountedErrors told = parts_->monitor.count(sim::LookTime{}, point, log2);
            const std::uint64_t most = board.monitor.counted.most_errors;
            const bool saturated = most > 0 && told.errors >= most;
            counts.push_back({look, saturated ? most : told.errors, saturated});
            bits += look.bits;
            cost += board.cost.per_look_s +
                    static_cast<double>(look.bits) / (board.bit_rate_gbps * 1e9);
        }
        search.told(counts);
    }
    Reading reading = search.result().value();
    reading.bit_count = bits;
    reading.cost_s = cost;
    return reading;
}

SearchResult run_search(const BenchLane& lane, ReadLane& reader, const SearchPlan& plan) {
    const StrategyEntry* entry = find_strategy(plan.strategy);
    if (entry == nullptr) throw std::runtime_error("no strategy " + plan.strategy);
    const Lane number{static_cast<std::uint16_t>(lane.lane())};
    Recipe recipe = lane.files().recipe;
    recipe.strategy = {plan.strategy, plan.stride, true};
    recipe.budget = {plan.readings, 0};
    LaneSetup setup = lane_setup_of(reader.board(), recipe, number, 1);
    setup.problem.space = &setup.space;
    setup.problem.present = plan.start.value_or(lane.reset_codes());
    const auto procedure =
        entry->make(setup.problem, {}, RandomKey{1, lanewright::number(number), 1, 0});
    const std::uint32_t before = reader.readings();
    for (auto requests = procedure->propose({}); !requests.empty();
         requests = procedure->propose({})) {
        std::vector<Reading> readings;
        for (const Request& request : requests) readings.push_back(reader.read(request));
        if (plan.readings > 0 && reader.readings() - before > plan.readings) {
            throw std::runtime_error(plan.strategy + " exceeds its budget");
        }
        procedure->observe(readings);
    }
    SearchResult result;
    result.decision = procedure->conclude();
    result.attainment = lane.attainment(result.decision.codes);
    result.impossible = !(result.attainment <= 1 + oracle_tolerance);
    return result;
}

SearchResult run_from_starts(const BenchLane& lane, Reader reader, SearchPlan plan,
                             const std::vector<Codes>& starts) {
    ReadLane bench(lane, reader);
    const double whole = plan.readings;
    plan.readings = std::floor(whole / static_cast<double>(starts.size()) - 1);
    std::vector<SearchResult> results;
    SearchResult best;
    double best_value = -std::numeric_limits<double>::infinity();
    double readings = 0, bench_s = 0;
    for (const Codes& start : starts) {
        plan.start = start;
        results.push_back(run_search(lane, bench, plan));
        readings += results.back().decision.standard_readings;
        bench_s += results.back().decision.bench_s;
    }
    for (const SearchResult& each : results) {
        const Recipe& recipe = lane.files().recipe;
        const BoardFile& board = lane.files().board(reader);
        const Reading fresh =
            bench.read({each.decision.codes,
                        {},
                        MarginWanted{recipe.search_error_ratio, dwell_bits_of(board, recipe)},
                        "which of the starts"});
        const double value = score_of(fresh, recipe.required).value;
        readings += 1;
        bench_s += fresh.cost_s;
        if (value < best_value) continue;
        best_value = value;
        best = each;
    }
    best.decision.standard_readings = readings;
    best.decision.bench_s = bench_s;
    return best;
}

double quantile(std::vector<double> values, double share) {
    if (values.empty()) return std::numeric_limits<double>::quiet_NaN();
    std::sort(values.begin(), values.end());
    const double rank = std::ceil(share * static_cast<double>(values.size()));
    return values[static_cast<std::size_t>(std::max(rank, 1.0)) - 1];
}

}  // namespace lanewright::bench
