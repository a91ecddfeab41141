// What the simulated board's truth costs: eye evaluations a second of CPU time beside the fixed
// loop of the same run, all codes of a lane and the best codes on two threads, whether the quick
// way to the best codes agrees with brute force, and how much of each lane's code space is closed.

#include <algorithm>
#include <chrono>
#include <iostream>
#include <stdexcept>
#include <string>
#include <vector>

#include "sim_target/physics/truth.hpp"
#include "tests/bench/rows.hpp"

using namespace lanewright;
using namespace lanewright::bench;

namespace {

constexpr unsigned threads = 2;
constexpr std::size_t sample_stride = 61;  // no multiple of any bank's code count

sim::TargetFile demo_target() {
    Complaints complaints;
    auto target = sim::load_target(LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json", complaints);
    if (!target) throw std::runtime_error(complaints.text());
    return std::move(*target);
}

template <class Job>
double seconds_of(const Job& job) {
    const auto start = std::chrono::steady_clock::now();
    job();
    return std::chrono::duration<double>(std::chrono::steady_clock::now() - start).count();
}

struct Sample {
    std::size_t codes = 0, closed = 0;
    double cpu_s = 0;
};

Sample sample_of(const sim::Oracle& oracle, double error_ratio) {
    Sample sample;
    const double before = cpu_seconds();
    for (std::size_t i = 0; i < oracle.combinations(); i += sample_stride) {
        const sim::Margins margins = oracle.margins(oracle.codes_at(i), error_ratio);
        ++sample.codes;
        if (margins.closed) ++sample.closed;
    }
    sample.cpu_s = cpu_seconds() - before;
    return sample;
}

void measure_samples(Rows& rows, const sim::TargetFile& target) {
    Sample all;
    for (std::size_t lane = 0; lane < target.lanes.size(); ++lane) {
        const Sample sample =
            sample_of(sim::Oracle(target, static_cast<int>(lane)), target.required.error_ratio);
        all.codes += sample.codes;
        all.cpu_s += sample.cpu_s;
        rows.row({.name = "closed_share.lane" + std::to_string(lane),
                  .value = static_cast<double>(sample.closed) / static_cast<double>(sample.codes),
                  .unit = "",
                  .better = Better::less,
                  .n = sample.codes,
                  .seed = target.seed});
    }
    const double per_s = static_cast<double>(all.codes) / all.cpu_s;
    rows.row({.name = "eye_evaluations",
              .value = per_s,
              .unit = "/cpu s",
              .better = Better::more,
              .must = 2000,
              .aim = 10'000,
              .n = all.codes,
              .seed = target.seed});
    rows.row({.name = "score",
              .value = 1e3 / per_s,
              .unit = "cpu ms",
              .better = Better::less,
              .must = 0.5,
              .n = all.codes,
              .seed = target.seed});
    rows.row({.name = "eyes_per_calibration_loop",
              .value = per_s * rows.calibration_s(),
              .unit = "",
              .better = Better::more,
              .n = all.codes,
              .seed = target.seed});
}

// 33 phases of one lane's contour, for codes all over the code space.
void measure_contours(Rows& rows, const sim::TargetFile& target) {
    const sim::Oracle oracle(target, static_cast<int>(target.lanes.size()) / 2);
    std::size_t contours = 0;
    const double before = cpu_seconds();
    for (std::size_t i = 0; i < oracle.combinations(); i += 16 * sample_stride, ++contours)
        oracle.contour_mv(oracle.codes_at(i), target.required.error_ratio, 33);
    rows.row({.name = "contour",
              .value = 1e3 * (cpu_seconds() - before) / static_cast<double>(contours),
              .unit = "cpu ms",
              .better = Better::less,
              .must = 2,
              .n = contours,
              .seed = target.seed});
}

void measure_whole_lane(Rows& rows, const sim::TargetFile& target, int lane) {
    const sim::Oracle oracle(target, lane);
    std::vector<sim::CodesScore> all;
    sim::CodesScore quick;
    const double all_s = seconds_of([&] { all = all_codes(oracle, target.required, threads); });
    const double best_s = seconds_of([&] { quick = best_codes(oracle, target.required, threads); });
    const auto best = std::max_element(
        all.begin(), all.end(),
        [](const auto& one, const auto& other) { return one.score < other.score; });
    const std::string suffix = ".lane" + std::to_string(lane);
    const auto row = [&](const std::string& name, double value, const char* unit, Better better,
                         std::optional<double> must, std::optional<double> aim) {
        rows.row({.name = name + suffix,
                  .value = value,
                  .unit = unit,
                  .better = better,
                  .must = must,
                  .aim = aim,
                  .n = all.size(),
                  .seed = target.seed});
    };
    row("all_codes_two_threads", all_s, "s", Better::less, 20, 10);
    row("best_codes_two_threads", best_s, "s", Better::less, 10, 3);
    row("best_over_brute_force", quick.score / best->score, "", Better::more, 0.999, {});
}

}  // namespace

int main() {
    const sim::TargetFile target = demo_target();
    Rows rows(std::cout);
    measure_samples(rows, target);
    measure_contours(rows, target);
    measure_whole_lane(rows, target, 0);
    measure_whole_lane(rows, target, static_cast<int>(target.lanes.size()) - 1);
    return rows.finish();
}
