#include "sim_target/monitor/monitored_lane.hpp"

#include <catch2/catch.hpp>

#include "sim_target/physics/gaussian.hpp"
#include "tests/sim_target/physics_support.hpp"

using namespace lanewright;
using namespace lanewright::sim;

namespace {

const std::vector<int> open_codes = {3, 4, 2, 0};
const std::vector<int> other_codes = {4, 4, 2, 0};

// The demo's link in small, with a monitor that adds nothing unless told otherwise.
nlohmann::json plain_json() {
    nlohmann::json json = small_json();
    json["monitor"] = {{"height_step_mv", 2},
                       {"width_step_ui", 1.0 / 64},
                       {"height_steps_max", 255},
                       {"width_steps_max", 31},
                       {"error_ratio", 1e-6}};
    for (const char* key : {"lock", "write_effects", "telemetry"}) json.erase(key);
    return json;
}

TargetFile plain_target(const nlohmann::json& monitor = {}) {
    nlohmann::json json = plain_json();
    if (monitor.is_object()) json["monitor"].update(monitor);
    return target_of(json);
}

std::vector<int> edges_of(MonitoredLane& lane, std::uint64_t ordinal, double ratio = 0,
                          std::uint64_t bits = 0) {
    lane.number(ordinal);
    const LatchedEdges e = lane.latch({}, ratio, bits);
    return {e.up, e.down, e.left, e.right, e.closed ? 1 : 0};
}

double share_at(MonitoredLane& lane, std::uint64_t ordinal, const MonitorPoint& point,
                unsigned log2 = 20) {
    lane.number(ordinal);
    const CountedErrors counted = lane.count({}, point, log2);
    return static_cast<double>(counted.errors) / std::exp2(counted.bits_log2);
}

// How much a count says of where the monitor looked: by the slope of the eye's edge.
double place_of(MonitoredLane& lane, double share, const MonitorPoint& near) {
    const auto deviate = [](double ratio) { return gaussian_tail_inverse(ratio); };
    const double here = deviate(lane.nominal_ratio(open_codes, near.offset, near.phase));
    const double next = deviate(lane.nominal_ratio(open_codes, near.offset + 1, near.phase));
    return (deviate(share) - here) / (next - here) * 2.0 * lane.offset_axis().gain();
}

// A position on the upper edge where about one bit in a hundred is wrong.
MonitorPoint on_upper_edge(MonitoredLane& lane) {
    MonitorPoint point = lane.origin();
    while (lane.nominal_ratio(open_codes, point.offset, point.phase) < 0.01) ++point.offset;
    return point;
}

struct Sample {
    double sum = 0, squares = 0;
    int count = 0;
    void add(double value) {
        sum += value;
        squares += value * value;
        ++count;
    }
    double variance() const { return (squares - sum * sum / count) / (count - 1); }
};

}  // namespace

TEST_CASE("a monitor's positions rise, and places lead back to their positions") {
    const auto axis = [](std::uint64_t lane) {
        return MonitorAxis({2.0, 4.0, 0.1, 0.2, 300},
                           KeyedRandom(1, Purpose::monitor_fixed, {lane}),
                           KeyedRandom(1, Purpose::monitor_position, {lane}));
    };
    Sample centres, gains, bends;
    for (std::uint64_t lane = 0; lane < 300; ++lane) {
        const MonitorAxis one = axis(lane);
        centres.add(one.place(one.position(0.0)));
        CHECK(std::abs(one.place(one.origin())) < 2 * 1.1);  // the nearest whole position
        gains.add(one.gain());
        for (int position = -30; position < 30; ++position) {
            REQUIRE(one.place(position + 1) > one.place(position));
            bends.add((one.place(position + 1) - one.place(position)) / (2.0 * one.gain()));
        }
        for (const double place : {-80.3, -0.7, 0.0, 13.1, 900.0}) {
            CHECK(one.place(one.position(place)) == Approx(place).margin(1e-9));
        }
    }
    CHECK(std::abs(centres.sum) < 1e-6);
    // Even inside ±10 %, and differences of two errors of 0.2 step, five standard errors.
    CHECK(gains.variance() == Approx(0.01 / 3).epsilon(0.25));
    CHECK(bends.variance() == Approx(0.08).epsilon(0.08));
}

TEST_CASE("monitors are off their data sampler as the target says, lane by lane") {
    Sample offsets;
    for (std::uint64_t lane = 0; lane < 2000; ++lane) {
        const MonitorAxis one({2.0, 4.0, 0, 0, 10}, KeyedRandom(1, Purpose::monitor_fixed, {lane}),
                              KeyedRandom(1, Purpose::monitor_position, {lane}));
        offsets.add(one.place(0));
    }
    CHECK(offsets.variance() == Approx(16.0).epsilon(5 * std::sqrt(2.0 / 2000)));
}

TEST_CASE("latched readings are keyed: the same again whenever they are taken") {
    const TargetFile target = plain_target({{"height_sigma_mv", 3}, {"width_sigma_ui", 0.02}});
    const auto all = [&](const TargetFile& from, int lane, int first, int step) {
        MonitoredLane model(from, lane);
        model.put(open_codes, true);
        std::vector<std::vector<int>> readings(30);
        for (int i = 0, at = first; i < 30; ++i, at += step) {
            readings[static_cast<std::size_t>(at)] =
                edges_of(model, static_cast<std::uint64_t>(at));
        }
        return readings;
    };
    const auto forwards = all(target, 1, 0, 1);
    CHECK(all(target, 1, 29, -1) == forwards);
    TargetFile other = target;
    other.seed = target.seed + 1;
    const auto by_seed = all(other, 1, 0, 1);
    int seed = 0, ordinal = 0;
    for (std::size_t i = 0; i + 1 < 30; ++i) {
        seed += by_seed[i] != forwards[i] ? 1 : 0;
        ordinal += forwards[i + 1] != forwards[i] ? 1 : 0;
    }
    CHECK(seed > 10);
    CHECK(ordinal > 10);
}

// Bounds at four standard errors: variance of the noise plus that of rounding, step²/12.
TEST_CASE("latched readings have the stated noise and steps around the true edges") {
    const TargetFile target = plain_target({{"height_sigma_mv", 3}, {"width_sigma_ui", 0.02}});
    MonitoredLane lane(target, 1);
    lane.put(open_codes, true);
    const Margins truth = lane.oracle().margins(open_codes, 1e-6);
    const int count = 1000;
    Sample up, left;
    for (int i = 0; i < count; ++i) {
        const auto edges = edges_of(lane, static_cast<std::uint64_t>(i), 1e-6);
        REQUIRE(edges[4] == 0);
        up.add(edges[0] * 2.0 - truth.up_mv);
        left.add(edges[2] / 64.0 - truth.left_ui);
    }
    const double up_variance = 9.0 + 4.0 / 12, left_variance = 4e-4 + 1.0 / 4096 / 12;
    CHECK(std::abs(up.sum / count) < 4 * std::sqrt(up_variance / count));
    CHECK(std::abs(left.sum / count) < 4 * std::sqrt(left_variance / count));
    const double tolerance = 4 * std::sqrt(2.0 / count);
    CHECK(up.variance() == Approx(up_variance).epsilon(tolerance));
    CHECK(left.variance() == Approx(left_variance).epsilon(tolerance));
}

TEST_CASE("latched readings without noise are the true edges to the nearest step and clamp") {
    MonitoredLane lane(plain_target(), 1);
    lane.put(open_codes, true);
    const Margins truth = lane.oracle().margins(open_codes, 1e-6);
    const auto edges = edges_of(lane, 0, 1e-6);
    CHECK(edges[0] == std::lround(truth.up_mv / 2.0));
    CHECK(edges[1] == std::lround(truth.down_mv / 2.0));
    CHECK(edges[2] == std::lround(truth.left_ui * 64));
    CHECK(edges[3] == std::lround(truth.right_ui * 64));

    MonitoredLane small(plain_target({{"height_steps_max", 5}, {"width_steps_max", 3}}), 1);
    small.put(open_codes, true);
    CHECK(edges_of(small, 0) == std::vector<int>{5, 5, 3, 3, 0});
}

TEST_CASE("a closed eye latches zeros, and a short dwell latches a wider eye") {
    const TargetFile target = plain_target();
    MonitoredLane lossy(target, 7);
    lossy.put(target.reset_codes, true);
    CHECK(edges_of(lossy, 0) == std::vector<int>{0, 0, 0, 0, 1});
    MonitoredLane easy(target, 2);
    easy.put(open_codes, true);
    const auto full = edges_of(easy, 0, 1e-9), brief = edges_of(easy, 1, 1e-9, 1000);
    CHECK(brief[0] > full[0]);
    CHECK(brief[2] > full[2]);
}

TEST_CASE("a counted look counts what the eye says of its place") {
    MonitoredLane lane(plain_target({{"offset_sigma_mv", 4},
                                     {"phase_sigma_ui", 0.03},
                                     {"gain_tolerance", 0.1},
                                     {"nonlinearity_steps", 0.2},
                                     {"deterministic_jitter_ui", 0.02}}),
                       1);
    lane.put(open_codes, true);
    const MonitorPoint edge = on_upper_edge(lane);
    const double place_mv = lane.offset_axis().place(edge.offset);
    const double place_ui = lane.phase_axis().place(edge.phase);
    const double p = 0.5 * (lane.oracle().error_ratio_at(open_codes, place_ui - 0.01, place_mv) +
                            lane.oracle().error_ratio_at(open_codes, place_ui + 0.01, place_mv));
    // Pearson's statistic of twenty counts; 45.3 is exceeded once in a thousand times (20 degrees
    // of freedom, value from memory).
    double chi_square = 0;
    const double n = std::exp2(20);
    for (std::uint64_t ordinal = 0; ordinal < 20; ++ordinal) {
        const double errors = share_at(lane, ordinal, edge) * n;
        chi_square += std::pow(errors - n * p, 2) / (n * p * (1 - p));
    }
    CHECK(chi_square < 45.315);
    CHECK(chi_square > 5.921);  // as rarely below
    // Half a unit interval away and far above, half of all bits are wrong.
    CHECK(share_at(lane, 30, {255, edge.phase}) == Approx(0.5).epsilon(0.01));
}

TEST_CASE("looks are keyed by their place and their turn, not by what came before them") {
    const TargetFile target = plain_target({{"height_sigma_mv", 0.4}});
    MonitoredLane one(target, 1), other(target, 1);
    one.put(open_codes, true);
    other.put(open_codes, true);
    const MonitorPoint edge = on_upper_edge(one), beside = {edge.offset + 1, edge.phase};
    one.number(4);
    const auto first = one.count({}, edge, 20).errors, second = one.count({}, edge, 20).errors;
    const auto third = one.count({}, beside, 20).errors;
    CHECK(first != second);
    other.number(4);
    CHECK(other.count({}, beside, 20).errors == third);
    CHECK(other.count({}, edge, 20).errors == first);
    CHECK(other.count({}, edge, 20).errors == second);
    // A new start with the same codes is the same reading.
    other.put(open_codes, true);
    CHECK(other.count({}, edge, 20).errors == first);
    other.number(4);
    CHECK(other.count({}, edge, 20).errors == first);
}

TEST_CASE(
    "against the receiver's own decision a closed eye looks open at the data sampler's place") {
    MonitoredLane lane(plain_target({{"errors_against", "decision"}}), 7);
    const std::vector<int> closed = {6, 1, 1, 1};
    lane.put(closed, true);
    CHECK(lane.oracle().margins(closed, 1e-6).closed);
    MonitoredLane pattern(plain_target(), 7);
    pattern.put(closed, true);
    // The two samplers' own noise is all that differs.
    CHECK(share_at(lane, 0, lane.origin()) < 0.1 * share_at(pattern, 0, pattern.origin()));
    CHECK(share_at(lane, 1, {255, 0}) == Approx(0.5).epsilon(0.01));
}

TEST_CASE("an hour's readings spread at least three times as far as a second's") {
    const auto demo = demo_json()["monitor"];
    nlohmann::json noise;
    for (const char* key : {"height_sigma_mv", "height_drift_mv", "drift_time_s"}) {
        noise[key] = demo.at(key);
    }
    noise["settle_s"] = 0.05;
    MonitoredLane brief(plain_target(noise), 1);
    noise["settle_s"] = 60;
    MonitoredLane slow(plain_target(noise), 1);
    brief.put(open_codes, true);
    slow.put(open_codes, true);
    const MonitorPoint edge = on_upper_edge(brief);
    // Sixty series of twenty readings within a second, and of sixty within an hour.
    double second = 0, hour = 0;
    std::uint64_t ordinal = 0;
    for (int series = 0; series < 60; ++series) {
        Sample within, over;
        for (int i = 0; i < 20; ++i) {
            within.add(place_of(brief, share_at(brief, ++ordinal, edge), edge));
        }
        for (int i = 0; i < 60; ++i) {
            over.add(place_of(slow, share_at(slow, ++ordinal, edge), edge));
        }
        second += within.variance();
        hour += over.variance();
    }
    const double ratio = std::sqrt(hour / second);
    INFO("over an hour " << std::sqrt(hour / 60) << " mV, over a second " << std::sqrt(second / 60)
                         << " mV");
    CHECK(ratio > 3.0);
    CHECK(ratio < 4.5);
}

TEST_CASE("one reading in a hundred has a burst or a slip, and in one look only") {
    MonitoredLane lane(plain_target({{"event_share", 0.01}}), 1);
    lane.put(open_codes, true);
    int slips = 0, bursts = 0, both = 0;
    const int readings = 8000;
    for (std::uint64_t ordinal = 0; ordinal < readings; ++ordinal) {
        lane.number(ordinal);
        int struck = 0;
        for (int look = 0; look < 9; ++look) {
            // At the origin of an open eye, nothing else makes errors.
            const auto errors = lane.count({}, lane.origin(), 12).errors;
            if (errors == 0) continue;
            ++struck;
            (errors > 1500 && errors < 2600 ? slips : bursts) += 1;
        }
        both += struck > 1 ? 1 : 0;
    }
    CHECK(both == 0);
    // Five standard errors of a binomial count.
    CHECK(std::abs(slips + bursts - 80) < 5 * std::sqrt(80.0));
    CHECK(slips > 15);
    CHECK(bursts > 15);
}

TEST_CASE("the noise-free edges are where the monitor counts the ratio") {
    MonitoredLane lane(plain_target({{"offset_sigma_mv", 4},
                                     {"phase_sigma_ui", 0.03},
                                     {"gain_tolerance", 0.1},
                                     {"nonlinearity_steps", 0.2},
                                     {"deterministic_jitter_ui", 0.02}}),
                       1);
    const NominalEdges edges = lane.nominal_edges(open_codes, 1e-6);
    REQUIRE_FALSE(edges.closed);
    const MonitorPoint from = lane.origin();
    const auto deviate = [&](double offset, double phase) {
        return gaussian_tail_inverse(
            lane.nominal_ratio(open_codes, from.offset + offset, from.phase + phase));
    };
    const double wanted = gaussian_tail_inverse(1e-6);
    CHECK(deviate(edges.up_mv / 2, 0) == Approx(wanted).epsilon(1e-3));
    CHECK(deviate(-edges.down_mv / 2, 0) == Approx(wanted).epsilon(1e-3));
    CHECK(deviate(0, -edges.left_ui * 64) == Approx(wanted).epsilon(1e-3));
    CHECK(deviate(0, edges.right_ui * 64) == Approx(wanted).epsilon(1e-3));
    // A monitor that adds nothing gives the truth.
    MonitoredLane plain(plain_target(), 1);
    const NominalEdges same = plain.nominal_edges(open_codes, 1e-6);
    const Margins truth = plain.oracle().margins(open_codes, 1e-6);
    CHECK(same.up_mv == Approx(truth.up_mv).epsilon(1e-3));
    CHECK(same.down_mv == Approx(truth.down_mv).epsilon(1e-3));
    CHECK(same.left_ui == Approx(truth.left_ui).epsilon(1e-3));
    CHECK(same.right_ui == Approx(truth.right_ui).epsilon(1e-3));
    CHECK(plain.nominal_edges({6, 1, 1, 1}, 1e-15).up_mv <
          plain.nominal_edges({6, 1, 1, 1}, 1e-3).up_mv);
}

TEST_CASE("a look too early after the strobe sees the way to the new value") {
    nlohmann::json json = plain_json();
    json["write_effects"] = {{"settle_time_us", 25}, {"settle_mv", 40}};
    MonitoredLane lane(target_of(json), 1);
    lane.put(open_codes, true);
    const MonitorPoint edge = on_upper_edge(lane);
    const auto share = [&](std::uint64_t ordinal, const std::vector<int>& codes, double after_s) {
        lane.put(codes, true);
        lane.number(ordinal);
        return static_cast<double>(lane.count({.since_strobe_s = after_s}, edge, 22).errors);
    };
    const double settled = share(0, open_codes, 1);
    share(1, other_codes, 1);
    CHECK(share(2, open_codes, 1e-6) > 1.5 * settled);
    share(3, other_codes, 1);
    CHECK(share(4, open_codes, 300e-6) == Approx(settled).epsilon(0.05));
    // Codes that stay have nowhere to go.
    CHECK(share(5, open_codes, 1e-6) == Approx(settled).epsilon(0.05));
}

TEST_CASE("without lock half of the bits are wrong and nothing is latched") {
    nlohmann::json json = plain_json();
    json["lock"] = {{"lost_above_ui", 0.001}};
    MonitoredLane lane(target_of(json), 1);
    CHECK_FALSE(lane.put(open_codes, true));
    CHECK(share_at(lane, 0, lane.origin()) == Approx(0.5).epsilon(0.01));
    CHECK(edges_of(lane, 1) == std::vector<int>{0, 0, 0, 0, 1});
    // Not there yet.
    MonitoredLane late(target_of(plain_json()), 1);
    CHECK(late.put(open_codes, true));
    late.number(0);
    const auto errors = late.count({.has_lock = false}, late.origin(), 20).errors;
    CHECK(static_cast<double>(errors) == Approx(std::exp2(19)).epsilon(0.01));
}
