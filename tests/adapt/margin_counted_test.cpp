#include <algorithm>
#include <bit>
#include <catch2/catch.hpp>
#include <cmath>
#include <limits>
#include <vector>

#include "adapt/stats/normal.hpp"
#include "adapt/stats/q_scale.hpp"
#include "adapt/stats/random.hpp"
#include "tests/adapt/counting_lane.hpp"

using namespace lanewright;
using namespace lanewright::tests;

namespace {

constexpr std::uint64_t tenth_of_a_second = 2'500'000'000;  // at 25 Gb/s

std::array<std::optional<Measured>, 4> edges_of(const Reading& reading) {
    return {reading.up_mv, reading.down_mv, reading.left_ui, reading.right_ui};
}

std::array<Measured, 4> slopes_of(const EdgeSlopes& slopes) {
    return {slopes.up_mv, slopes.down_mv, slopes.left_ui, slopes.right_ui};
}

double step_of(const LookGrid& grid, std::size_t direction) {
    return direction < 2 ? grid.offset_step_mv : grid.phase_step_ui;
}

LookGrid uneven_grid() {
    LookGrid grid = demo_grid();
    grid.offset_nonlinearity_steps = grid.phase_nonlinearity_steps = 0.2;
    grid.offset_sigma_mv = 0.1;
    grid.phase_sigma_ui = 0.001;
    return grid;
}

// Where the edges truly are, wrong by up to a fifth: a last reading at a neighbouring code.
Expected roughly(const CountingLane& lane, const LookGrid& grid, double ratio) {
    const auto guess = [&](std::size_t direction) {
        const double wrong = 0.1 * ((static_cast<int>(lane.lane) * 7 + int(direction) * 3) % 5 - 2);
        return lane.true_edge_steps(grid, direction, ratio) * step_of(grid, direction) *
               (1 + wrong);
    };
    return {guess(0), guess(1), guess(2), guess(3)};
}

struct Tally {
    std::size_t edges = 0, inside = 0;
    double errors = 0, least = 0;  // steps, where the least is known
    std::vector<std::size_t> looks;
};

void add_edges(Tally& tally, const CountingLane& lane, const LookGrid& grid, const Reading& reading,
               double ratio) {
    for (std::size_t direction = 0; direction < 4; ++direction) {
        const auto edge = edges_of(reading)[direction];
        REQUIRE(edge);
        if (edge->bound != Bound::exact) continue;
        const Measured there =
            carried_edge(*edge, slopes_of(*reading.slopes)[direction], reading.error_ratio, ratio);
        if (!std::isfinite(there.std_error)) continue;
        const double step = step_of(grid, direction);
        const double truth = lane.true_edge_steps(grid, direction, ratio) * step;
        if (truth == 0) continue;
        tally.edges += 1;
        tally.inside += std::abs(there.value - truth) <= 1.959964 * there.std_error ? 1 : 0;
        const auto least = least_error_steps(lane, grid, reading.counts, direction, ratio);
        if (least && *least < 0.5) {
            tally.errors += there.std_error / step;
            tally.least += *least;
        }
    }
}

Tally read_lanes(std::uint32_t count, double asked, double stated, bool expected) {
    Tally tally;
    const LookGrid grid = uneven_grid();
    for (std::uint32_t i = 0; i < count; ++i) {
        CountingLane lane = drawn_lane(static_cast<EdgeShape>(i % 3), 41, i, 1e-6);
        lane.nonlinearity_steps = 0.2;
        MarginWanted wanted{asked, tenth_of_a_second, {}};
        if (expected) wanted.expected = roughly(lane, grid, counted_ratio(wanted, grid));
        const auto counted = read(lane, grid, wanted, 0);
        REQUIRE(counted);
        REQUIRE(counted->reading.status != Status::closed);
        tally.looks.push_back(counted->looks);
        add_edges(tally, lane, grid, counted->reading, stated);
    }
    std::sort(tally.looks.begin(), tally.looks.end());
    return tally;
}

void close_at(CountingLane& lane, double centre_ratio) {
    double low = -200, high = 200;
    for (int i = 0; i < 60; ++i) {
        lane.level_mv = 0.5 * (low + high);
        (lane.centre_ratio() > centre_ratio ? low : high) = lane.level_mv;
    }
}

}  // namespace

// Truth is the noise-free edge through the same monitor at the ratio counted. 1,000 lanes are the
// business of the benchmark; here a right program stays above 92 % but once in thousands of years.
TEST_CASE("95 % intervals of counted edges hold the truth and are not idly wide") {
    for (const bool expected : {false, true}) {
        const Tally tally = read_lanes(200, 1e-6, 1e-6, expected);
        INFO(tally.inside << " of " << tally.edges);
        CHECK(tally.edges > 760);
        CHECK(double(tally.inside) > 0.92 * double(tally.edges));
        CHECK(tally.errors < 1.5 * tally.least);
        CHECK(tally.looks[tally.looks.size() / 2] <= 16);
    }
}

TEST_CASE("extrapolated edges hold the truth five decades further out") {
    const Tally tally = read_lanes(150, 1e-12, 1e-12, true);
    INFO(tally.inside << " of " << tally.edges);
    CHECK(tally.edges > 350);
    CHECK(double(tally.inside) > 0.92 * double(tally.edges));
}

TEST_CASE("a ratio that the dwell cannot count is read at the lowest that it can") {
    const LookGrid grid = demo_grid();
    CHECK(counted_ratio({1e-6, tenth_of_a_second, {}}, grid) == 1e-6);
    const double lower = counted_ratio({1e-12, tenth_of_a_second, {}}, grid);
    CHECK(lower == Approx(1e-7).epsilon(1e-9));
    // Ten times the dwell, a tenth of the ratio.
    CHECK(counted_ratio({1e-12, 10 * tenth_of_a_second, {}}, grid) == Approx(lower / 10));
    CHECK(counted_ratio({0, tenth_of_a_second, {}}, grid) <= 0.01);
    CHECK(counted_ratio({1e-15, 0, {}}, grid) <= 0.01);
}

TEST_CASE("a Gaussian edge comes out finer than a step with its slope") {
    LookGrid grid = demo_grid();
    CountingLane lane;
    lane.level_mv = 60.7;
    lane.noise_mv = 4;
    const auto counted = read(lane, grid, {1e-6, tenth_of_a_second, {}}, 0);
    REQUIRE(counted);
    const Reading& reading = counted->reading;
    CHECK(reading.status == Status::open);
    CHECK(reading.basis == Basis::counted);
    CHECK(reading.error_ratio == 1e-6);
    CHECK(reading.counts.size() == counted->looks);
    std::uint64_t bits = 0;
    for (const Count& count : reading.counts) bits += count.look.bits;
    CHECK(reading.bit_count == bits);
    // Half of all bits are ones: the edge is where they alone lose 2e-6. 4.6114 is that deviate.
    const double edge = 60.7 - normal_q(2e-6) * 4;
    CHECK(reading.up_mv->std_error < 0.5);
    CHECK(std::abs(reading.up_mv->value - edge) < 4 * reading.up_mv->std_error);
    REQUIRE(reading.slopes);
    CHECK(std::abs(reading.slopes->up_mv.value - 4) < 4 * reading.slopes->up_mv.std_error + 0.2);
    CHECK(reading.slopes->up_mv.std_error < 1);
}

TEST_CASE("what is expected saves rounds") {
    const LookGrid grid = uneven_grid();
    std::size_t blind = 0, told = 0;
    for (std::uint32_t i = 0; i < 30; ++i) {
        const CountingLane lane = drawn_lane(EdgeShape::mixture, 43, i, 1e-6);
        MarginWanted wanted{1e-6, tenth_of_a_second, {}};
        blind += read(lane, grid, wanted, 0)->rounds;
        wanted.expected = roughly(lane, grid, 1e-6);
        told += read(lane, grid, wanted, 0)->rounds;
    }
    CHECK(told < 0.8 * double(blind));
}

TEST_CASE("the next looks are the same however often they are asked for and whatever the batch") {
    const LookGrid grid = uneven_grid();
    const CountingLane lane = drawn_lane(EdgeShape::two_diracs, 44, 3, 1e-6);
    EdgeSearch search({1e-6, tenth_of_a_second, {}}, grid);
    CHECK_FALSE(search.result());
    const auto all = search.next(16);
    REQUIRE(all.size() > 1);
    CHECK(search.next(16) == all);
    CHECK(search.next(1) == std::vector<Look>{all.front()});
    // One look at a time ends as well.
    const auto counted = read(lane, grid, {1e-6, tenth_of_a_second, {}}, 0, 1);
    REQUIRE(counted);
    CHECK(counted->rounds == counted->looks);
    CHECK(counted->looks <= grid.most_looks);
}

TEST_CASE("looks are whole steps of allowed length and keep to the dwell") {
    LookGrid grid = uneven_grid();
    grid.least_bits = 4096;
    grid.most_bits = std::uint64_t{1} << 26;
    for (std::uint32_t i = 0; i < 30; ++i) {
        const CountingLane lane = drawn_lane(EdgeShape::mixture, 45, i, 1e-6);
        const auto counted = read(lane, grid, {1e-6, 300'000'000, {}}, 0);
        REQUIRE(counted);
        CHECK(counted->reading.bit_count <= 300'000'000);
        for (const Count& count : counted->reading.counts) {
            const Look& look = count.look;
            CHECK(std::has_single_bit(look.bits));
            CHECK(look.bits >= grid.least_bits);
            CHECK(look.bits <= grid.most_bits);
            const double offset = look.offset_mv / grid.offset_step_mv;
            const double phase = look.phase_ui / grid.phase_step_ui;
            CHECK(offset == std::round(offset));
            CHECK(phase == std::round(phase));
            CHECK(std::abs(offset) <= grid.offset_most_steps);
            CHECK(std::abs(phase) <= grid.phase_most_steps);
            CHECK((offset == 0 || phase == 0));
        }
    }
}

TEST_CASE("a closed eye against a known pattern gives its centre and a signed margin, quickly") {
    const LookGrid grid = demo_grid();
    double last_up = 0, last_left = 0;
    for (const double centre : {1e-4, 1e-3, 1e-2, 0.05}) {
        CountingLane lane;
        lane.noise_mv = 6;
        close_at(lane, centre);
        const auto counted = read(lane, grid, {1e-6, tenth_of_a_second, {}}, 0);
        REQUIRE(counted);
        const Reading& reading = counted->reading;
        INFO("centre " << centre);
        CHECK(reading.status == Status::closed);
        REQUIRE(reading.centre_error_ratio);
        CHECK(*reading.centre_error_ratio == Approx(centre).epsilon(0.3));
        // Up and down to where the ones and the zeros reach the ratio, left and right as the
        // missing share of the normal deviate: what the truth of the simulated board means, too.
        const double level = lane.true_level_mv(0, 1e-6);
        REQUIRE(reading.up_mv->bound == Bound::exact);
        CHECK(std::abs(reading.up_mv->value - level) < 3 * reading.up_mv->std_error);
        CHECK(std::abs(reading.down_mv->value - level) < 3 * reading.down_mv->std_error);
        const double wanted = normal_q(1e-6);
        const double share = -0.5 * (wanted - normal_q(centre)) / wanted;
        CHECK(std::abs(reading.left_ui->value - share) < 4 * reading.left_ui->std_error);
        CHECK(reading.up_mv->value < last_up);
        CHECK(reading.left_ui->value < last_left);
        last_up = reading.up_mv->value;
        last_left = reading.left_ui->value;
        CHECK(counted->looks <= 12);
        CHECK(counted->reading.bit_count < 300'000'000);
    }
}

TEST_CASE("without lock half the bits are wrong and the reading ends at once") {
    CountingLane lane;
    lane.level_mv = 0;
    const auto counted = read(lane, demo_grid(), {1e-6, tenth_of_a_second, {}}, 0);
    REQUIRE(counted);
    CHECK(counted->reading.status == Status::closed);
    CHECK(*counted->reading.centre_error_ratio == Approx(0.5).epsilon(0.01));
    CHECK(counted->reading.left_ui->value == Approx(-0.5).epsilon(0.01));
    CHECK(counted->reading.up_mv->bound == Bound::at_most);
    CHECK(counted->looks <= 5);
}

TEST_CASE("compared with the receiver's own decision a closed eye shows no centre") {
    LookGrid grid = demo_grid();
    grid.error_definition = ErrorDefinition::decision;
    CountingLane lane;
    lane.definition = ErrorDefinition::decision;
    lane.noise_mv = 12;
    lane.level_mv = 20;  // a bit in twenty is wrong, and the monitor agrees with it
    const auto counted = read(lane, grid, {1e-6, tenth_of_a_second, {}}, 0);
    REQUIRE(counted);
    CHECK(counted->reading.status == Status::closed);
    CHECK_FALSE(counted->reading.centre_error_ratio);
    CHECK(counted->reading.error_definition == ErrorDefinition::decision);
    CHECK(counted->reading.up_mv->bound == Bound::at_most);
    for (const Count& count : counted->reading.counts) {
        CHECK((count.look.offset_mv != 0 || count.look.phase_ui != 0));
    }
    // An open one is read like any other.
    lane.noise_mv = 4;
    lane.level_mv = 60;
    const auto open = read(lane, grid, {1e-6, tenth_of_a_second, {}}, 1);
    REQUIRE(open);
    CHECK(open->reading.status == Status::open);
    const double truth = 2 * lane.true_edge_steps(grid, 0, 1e-6);
    CHECK(std::abs(open->reading.up_mv->value - truth) < 4 * open->reading.up_mv->std_error);
}

TEST_CASE("an edge beyond the range is at least that far") {
    LookGrid grid = demo_grid();
    grid.offset_most_steps = 20;
    CountingLane lane;
    lane.level_mv = 90;
    const auto counted = read(lane, grid, {1e-6, tenth_of_a_second, {}}, 0);
    REQUIRE(counted);
    CHECK(counted->reading.status == Status::saturated);
    CHECK(counted->reading.up_mv->bound == Bound::at_least);
    CHECK(counted->reading.up_mv->value == 40);
    CHECK(counted->reading.left_ui->bound == Bound::exact);
    CHECK(counted->reading.slopes->up_mv.bound == Bound::at_least);
}

TEST_CASE("counters that stop at 255 still give edges that hold the truth") {
    LookGrid grid = uneven_grid();
    grid.most_errors = 255;
    Tally tally;
    for (std::uint32_t i = 0; i < 80; ++i) {
        CountingLane lane = drawn_lane(EdgeShape::two_diracs, 46, i, 1e-6);
        lane.nonlinearity_steps = 0.2;
        MarginWanted wanted{1e-6, tenth_of_a_second, {}};
        wanted.expected = roughly(lane, grid, 1e-6);
        const auto counted = read(lane, grid, wanted, 0);
        REQUIRE(counted);
        add_edges(tally, lane, grid, counted->reading, 1e-6);
    }
    CHECK(tally.edges > 250);
    CHECK(double(tally.inside) > 0.9 * double(tally.edges));
}

TEST_CASE("a burst or a slip in one look of every reading closes no eye and moves few edges") {
    const LookGrid grid = uneven_grid();
    Tally tally;
    for (std::uint32_t i = 0; i < 150; ++i) {
        CountingLane lane = drawn_lane(static_cast<EdgeShape>(i % 3), 48, i, 1e-6);
        lane.nonlinearity_steps = 0.2;
        lane.spoilt_readings = 1;
        MarginWanted wanted{1e-6, tenth_of_a_second, {}};
        if (i % 2 == 0) wanted.expected = roughly(lane, grid, 1e-6);
        const auto counted = read(lane, grid, wanted, 0);
        REQUIRE(counted);
        CHECK(counted->reading.status != Status::closed);
        add_edges(tally, lane, grid, counted->reading, 1e-6);
    }
    INFO(tally.inside << " of " << tally.edges);
    // One look in sixteen is spoilt; an edge in four could be lost to it.
    CHECK(double(tally.inside) > 0.85 * double(tally.edges));
}

TEST_CASE("whatever a monitor answers, a reading ends and says only what is finite") {
    Random random({47, 0, 0, 0});
    for (int run = 0; run < 400; ++run) {
        LookGrid grid = uneven_grid();
        if (run % 7 == 0) grid.offset_step_mv = 0;
        if (run % 11 == 0) grid.phase_most_steps = 0;
        if (run % 13 == 0) grid.most_bits = 0;
        if (run % 5 == 0) grid.error_definition = ErrorDefinition::decision;
        MarginWanted wanted{std::pow(10.0, -12 * random.uniform()), random.below(1u << 31), {}};
        if (run % 17 == 0) wanted.error_ratio = std::numeric_limits<double>::quiet_NaN();
        if (run % 3 == 0) wanted.expected = {1e9, -5, std::nan(""), 0.2};
        EdgeSearch search(wanted, grid);
        std::size_t looks = 0;
        for (auto next = search.next(4); !next.empty(); next = search.next(4)) {
            std::vector<Count> counts;
            for (const Look& look : next) {
                const std::uint64_t top = random.below(3) == 0 ? 3 * look.bits : 200;
                counts.push_back({look, random.below(top + 1), random.below(9) == 0});
                if (random.below(10) == 0) counts.back().errors = 0;
            }
            looks += next.size();
            REQUIRE(looks <= grid.most_looks);
            search.told(counts);
        }
        const auto reading = search.result();
        REQUIRE(reading);
        CHECK(reading->status != Status::void_reading);
        for (const auto& edge : edges_of(*reading)) {
            REQUIRE(edge);
            CHECK(std::isfinite(edge->value));
            CHECK(std::isfinite(edge->std_error));
            CHECK(edge->std_error >= 0);
        }
    }
}
