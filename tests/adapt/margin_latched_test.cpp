#include <catch2/catch.hpp>
#include <cmath>

#include "adapt/margin/latched.hpp"

using namespace lanewright;

namespace {

constexpr MonitorGrid grid{2.0, 1.0 / 64, 63, 31, 0.6, 0.004};
constexpr MarginWanted wanted{1e-6, 50'000'000};

}  // namespace

TEST_CASE("latched steps become distances with the step and the repeatability in their errors") {
    const auto reading = latched_reading(grid, LatchedEdges{10, 9, 12, 13, true}, wanted);
    CHECK(reading.status == Status::open);
    CHECK_FALSE(reading.centred_assumed);
    CHECK_FALSE(reading.height_mv);
    REQUIRE(reading.up_mv);
    CHECK(reading.up_mv->value == 20);
    CHECK(reading.down_mv->value == 18);
    CHECK(reading.left_ui->value == 12.0 / 64);
    CHECK(reading.right_ui->value == 13.0 / 64);
    // Variance of an even spread over one step: step^2/12 (common practice).
    CHECK(reading.up_mv->std_error == Approx(std::sqrt(4.0 / 12 + 0.36)));
    CHECK(reading.left_ui->std_error == Approx(std::sqrt(1.0 / 64 / 64 / 12 + 0.000016)));
    CHECK(reading.error_ratio == 1e-6);
    CHECK(reading.bit_count == 50'000'000);
}

TEST_CASE("an edge of no steps is at most half a step away and closes the eye") {
    const auto reading = latched_reading(grid, LatchedEdges{0, 9, 12, 13, true}, wanted);
    CHECK(reading.status == Status::closed);
    CHECK(reading.up_mv->bound == Bound::at_most);
    CHECK(reading.up_mv->value == 1.0);
    CHECK(reading.up_mv->std_error == 0.6);
    CHECK(reading.down_mv->bound == Bound::exact);
}

TEST_CASE("an edge at the counter's top is only known to be at least that far") {
    const auto reading = latched_reading(grid, LatchedEdges{63, 20, 10, 99, true}, wanted);
    CHECK(reading.status == Status::saturated);
    CHECK(reading.up_mv->bound == Bound::at_least);
    CHECK(reading.up_mv->value == 126);
    CHECK(reading.right_ui->bound == Bound::at_least);
    CHECK(reading.right_ui->value == 31.0 / 64);
    CHECK(latched_reading(grid, LatchedEdges{63, 0, 10, 9, true}, wanted).status == Status::closed);
}

TEST_CASE("without lock there are no edges") {
    const auto reading = latched_reading(grid, LatchedEdges{10, 10, 10, 10, false}, wanted);
    CHECK(reading.status == Status::no_lock);
    CHECK_FALSE(reading.up_mv);
    CHECK_FALSE(reading.right_ui);
}

TEST_CASE("counts that no counter can show are taken as its nearest end") {
    const auto reading = latched_reading(grid, LatchedEdges{-5, 1000, 3, 3, true}, wanted);
    CHECK(reading.up_mv->bound == Bound::at_most);
    CHECK(reading.down_mv->value == 126);
}

TEST_CASE("a monitor of height and width alone leaves the edges out and says so") {
    const auto reading = latched_reading(grid, LatchedOpening{20, 24, true}, wanted);
    CHECK(reading.centred_assumed);
    CHECK_FALSE(reading.up_mv);
    CHECK_FALSE(reading.left_ui);
    REQUIRE(reading.height_mv);
    CHECK(reading.height_mv->value == 40);
    CHECK(reading.height_mv->std_error == Approx(std::sqrt(4.0 / 12 + 2 * 0.36)));
    CHECK(reading.width_ui->value == 24.0 / 64);
    CHECK(reading.status == Status::open);
    CHECK(latched_reading(grid, LatchedOpening{0, 24, true}, wanted).status == Status::closed);
    const auto unlocked = latched_reading(grid, LatchedOpening{0, 24, false}, wanted);
    CHECK(unlocked.centred_assumed);
    CHECK(unlocked.status == Status::no_lock);
}
