// How near the strategies come to the best codes, and what they pay for it: the simulated target's
// lanes without wires, noise on, against the oracle's best. Several draws of the monitor's noise;
// several chips where asked for, the target file's own one first.
// usage: bench_search [--seeds N] [--chips N]

#include <algorithm>
#include <charconv>
#include <cmath>
#include <cstring>
#include <iostream>
#include <map>
#include <numeric>
#include <optional>
#include <string>
#include <thread>
#include <vector>

#include "tests/bench/rows.hpp"
#include "tests/bench/truth_bench.hpp"

using namespace lanewright;
using namespace lanewright::bench;

namespace {

constexpr int exit_impossible = 1;
constexpr int exit_usage = 64;  // sysexits.h

struct Options {
    std::uint64_t seeds = 5, chips = 1;
};

std::optional<Options> options_from(int count, char** words) {
    Options options;
    for (int i = 1; i < count; i += 2) {
        std::uint64_t* number = std::strcmp(words[i], "--seeds") == 0   ? &options.seeds
                                : std::strcmp(words[i], "--chips") == 0 ? &options.chips
                                                                        : nullptr;
        if (number == nullptr || i + 1 >= count) return std::nullopt;
        const char* end = words[i + 1] + std::strlen(words[i + 1]);
        const auto read = std::from_chars(words[i + 1], end, *number);
        if (read.ec != std::errc{} || read.ptr != end || *number < 1 || *number > 10'000) {
            return std::nullopt;
        }
    }
    return options;
}

// What the runs of one strategy on one lane gave, over all chips and seeds.
struct Tally {
    std::vector<double> attainment, readings, bench_s;

    void add(const SearchResult& result) {
        attainment.push_back(result.attainment);
        readings.push_back(result.decision.standard_readings);
        bench_s.push_back(result.decision.bench_s);
    }
    void add(const Tally& other) {
        const auto join = [](std::vector<double>& all, const std::vector<double>& more) {
            all.insert(all.end(), more.begin(), more.end());
        };
        join(attainment, other.attainment);
        join(readings, other.readings);
        join(bench_s, other.bench_s);
    }
};

double mean_of(const std::vector<double>& values) {
    return std::accumulate(values.begin(), values.end(), 0.0) / static_cast<double>(values.size());
}

// The value that this share of all lie at or below (nearest rank).
double quantile(std::vector<double> values, double share) {
    std::sort(values.begin(), values.end());
    const double rank = std::ceil(share * static_cast<double>(values.size()));
    return values[static_cast<std::size_t>(std::max(rank, 1.0)) - 1];
}

using Tallies = std::map<std::string_view, std::vector<Tally>>;  // by strategy, then lane

struct Findings {
    Tallies tallies;
    std::uint64_t impossible = 0;
};

void measure_lane(const DemoFiles& files, const TruthLane& lane, const Options& options,
                  Findings& findings) {
    for (const StrategyEntry& strategy : strategies()) {
        auto& lanes = findings.tallies[strategy.name];
        lanes.resize(files.target.lanes.size());
        for (std::uint64_t seed = 1; seed <= options.seeds; ++seed) {
            const SearchResult result = run_search(files, lane, strategy.name, seed);
            lanes.at(static_cast<std::size_t>(lane.lane())).add(result);
            if (result.impossible) ++findings.impossible;
        }
    }
}

Findings measure(const Options& options) {
    Findings findings;
    DemoFiles files = load_demo_files();
    const std::uint64_t first_chip = files.target.seed;
    const unsigned threads = std::clamp(std::thread::hardware_concurrency(), 1U, 64U);
    for (std::uint64_t chip = 0; chip < options.chips; ++chip) {
        files.target.seed = first_chip + chip;
        for (std::size_t lane = 0; lane < files.target.lanes.size(); ++lane) {
            measure_lane(files, TruthLane(files, static_cast<int>(lane), threads), options,
                         findings);
        }
    }
    return findings;
}

void write_lane(Rows& rows, const std::string& name, const Tally& tally) {
    const auto row = [&](const char* what, const char* unit, Better better,
                         const std::vector<double>& values) {
        rows.row({.name = name + "." + what,
                  .value = mean_of(values),
                  .unit = unit,
                  .better = better,
                  .n = values.size(),
                  .seed = 1});
    };
    row("attainment", "", Better::more, tally.attainment);
    row("readings", "std", Better::less, tally.readings);
    row("bench_s", "s", Better::less, tally.bench_s);
}

// The strategies that a recipe would choose for a real bench must come near the best.
void write_strategy(Rows& rows, const std::string& name, const Tally& all) {
    const bool held = name != "exhaustive";
    const auto row = [&](const char* what, double value, std::optional<double> must) {
        rows.row({.name = name + "." + what,
                  .value = value,
                  .unit = "",
                  .better = Better::more,
                  .must = held ? must : std::nullopt,
                  .aim = 0.98,
                  .n = all.attainment.size(),
                  .seed = 1});
    };
    row("attainment_p5", quantile(all.attainment, 0.05), 0.85);
    row("attainment_p50", quantile(all.attainment, 0.5), 0.95);
    rows.row({.name = name + ".readings",
              .value = mean_of(all.readings),
              .unit = "std",
              .better = Better::less,
              .n = all.readings.size(),
              .seed = 1});
}

}  // namespace

int main(int count, char** words) {
    const auto options = options_from(count, words);
    if (!options) {
        std::cerr << "usage: bench_search [--seeds N] [--chips N], 1 to 10000 each\n";
        return exit_usage;
    }
    Rows rows(std::cout);
    const Findings findings = measure(*options);
    std::size_t decisions = 0;
    for (const auto& [strategy, lanes] : findings.tallies) {
        Tally all;
        for (std::size_t lane = 0; lane < lanes.size(); ++lane) {
            write_lane(rows, std::string(strategy) + ".lane" + std::to_string(lane), lanes[lane]);
            all.add(lanes[lane]);
        }
        write_strategy(rows, std::string(strategy), all);
        decisions += all.attainment.size();
    }
    // Better than the best is no success: one of the two is wrong.
    rows.row({.name = "decisions_beyond_best",
              .value = static_cast<double>(findings.impossible),
              .unit = "",
              .better = Better::less,
              .must = 0,
              .n = decisions,
              .seed = 1});
    const int status = rows.finish();
    return findings.impossible > 0 ? exit_impossible : status;
}
