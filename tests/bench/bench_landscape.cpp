// What the simulated lanes ask of a search: how often the best code of a bank lies at its end, how
// much of the code space shows a closed eye, and how few codes are nearly as good as the best.
// usage: bench_landscape [TARGET_FILE [BOARDS]]; without a file both committed populations.

#include <algorithm>
#include <array>
#include <cstdlib>
#include <iostream>
#include <stdexcept>
#include <string>
#include <vector>

#include "sim_target/physics/keyed_random.hpp"
#include "sim_target/physics/truth.hpp"
#include "tests/bench/rows.hpp"

using namespace lanewright;
using namespace lanewright::bench;

namespace {

constexpr unsigned threads = 2;
constexpr std::size_t sampled_codes = 4096;
constexpr int boards_by_default = 3;

struct Landscape {
    std::vector<int> best;
    double best_score = 0;
    bool outside = false;
    std::size_t sampled = 0, closed = 0, within_two = 0, within_five = 0;
};

Landscape landscape_of(const sim::TargetFile& target, int lane) {
    const sim::Oracle oracle(target, lane);
    Landscape landscape;
    const sim::CodesScore best = best_codes(oracle, target.required, threads);
    landscape.best = best.codes;
    landscape.best_score = best.score;
    landscape.outside = target.lanes[static_cast<std::size_t>(lane)].outside_plain;
    sim::KeyedRandom random(target.seed, sim::Purpose::population_lane,
                            {static_cast<std::uint64_t>(lane), sampled_codes});
    for (; landscape.sampled < sampled_codes; ++landscape.sampled) {
        const auto index =
            static_cast<std::size_t>(random.uniform() * static_cast<double>(oracle.combinations()));
        const sim::Margins margins =
            oracle.margins(oracle.codes_at(index), target.required.error_ratio);
        const double score = sim::score(margins, target.required);
        landscape.closed += margins.closed ? 1 : 0;
        landscape.within_two += score >= 0.98 * best.score ? 1 : 0;
        landscape.within_five += score >= 0.95 * best.score ? 1 : 0;
    }
    return landscape;
}

void print_lane(const sim::TargetFile& target, int lane, const Landscape& found) {
    std::cerr << "board " << target.board << " lane " << lane << (found.outside ? " outside" : "")
              << ", best";
    for (const int code : found.best) std::cerr << ' ' << code;
    std::cerr << ", score " << found.best_score << ", closed "
              << static_cast<double>(found.closed) / static_cast<double>(found.sampled)
              << ", within 5 % " << found.within_five << '\n';
}

std::vector<Landscape> survey(const sim::TargetFile& target, int boards) {
    std::vector<Landscape> lanes;
    const int count = target.population ? std::min(boards, target.population->boards) : 1;
    for (int board = 0; board < count; ++board) {
        const sim::TargetFile one =
            target.population ? sim::population_board(target, board) : target;
        for (int lane = 0; lane < static_cast<int>(one.lanes.size()); ++lane) {
            lanes.push_back(landscape_of(one, lane));
            print_lane(one, lane, lanes.back());
        }
    }
    return lanes;
}

void print_rows(Rows& rows, const std::string& name, const sim::TargetFile& target,
                const std::vector<Landscape>& lanes) {
    const auto row = [&](const std::string& what, double value, std::optional<double> must) {
        rows.row({.name = name + "." + what,
                  .value = value,
                  .unit = "",
                  .better = Better::less,
                  .must = must,
                  .n = lanes.size(),
                  .seed = target.population ? target.population->seed : target.seed});
    };
    for (std::size_t bank = 0; bank < sim::bank_count; ++bank) {
        const int top = target.receiver.banks[bank].codes() - 1;
        const auto at_end = std::count_if(lanes.begin(), lanes.end(), [&](const Landscape& lane) {
            return lane.best[bank] == 0 || lane.best[bank] == top;
        });
        row("best_at_end." + std::string(sim::dimension_names()[bank]),
            static_cast<double>(at_end) / static_cast<double>(lanes.size()),
            bank == sim::bank_c2 ? 0.4 : 0.25);
    }
    const auto share = [&](std::size_t Landscape::* count) {
        std::size_t sum = 0, all = 0;
        for (const Landscape& lane : lanes) {
            sum += lane.*count;
            all += lane.sampled;
        }
        return static_cast<double>(sum) / static_cast<double>(all);
    };
    row("closed_codes", share(&Landscape::closed), {});
    row("codes_within_2_percent", share(&Landscape::within_two), {});
    row("codes_within_5_percent", share(&Landscape::within_five), {});
    const auto failing = std::count_if(lanes.begin(), lanes.end(),
                                       [](const Landscape& lane) { return lane.best_score < 1; });
    row("lanes_whose_best_fails", static_cast<double>(failing) / static_cast<double>(lanes.size()),
        {});
}

sim::TargetFile loaded(const std::string& path) {
    Complaints complaints;
    auto target = sim::load_target(path, complaints);
    if (!target) throw std::runtime_error(complaints.text());
    return std::move(*target);
}

}  // namespace

int main(int count, char** words) {
    const std::string folder = LANEWRIGHT_SOURCE_DIR "/configs/targets/";
    std::vector<std::string> paths = {folder + "population.json", folder + "population_hard.json"};
    if (count > 1) paths = {words[1]};
    const int boards = count > 2 ? std::atoi(words[2]) : boards_by_default;
    Rows rows(std::cout);
    for (const std::string& path : paths) {
        const sim::TargetFile target = loaded(path);
        const std::size_t slash = path.rfind('/') + 1;
        const std::string name = path.substr(slash, path.rfind('.') - slash);
        print_rows(rows, name, target, survey(target, boards));
    }
    return rows.finish();
}
