#include <catch2/catch.hpp>
#include <vector>

#include "adapt/search/verdict.hpp"

using namespace lanewright;

namespace {

constexpr Required required{1e-6, 40, 0.3};

std::vector<Reading> fresh(double half_height_mv, double std_error_mv, std::size_t count = 4) {
    Reading reading;
    reading.status = Status::open;
    reading.error_ratio = 1e-6;
    reading.cost_s = 0.1;
    reading.up_mv = reading.down_mv = Measured{half_height_mv, std_error_mv, Bound::exact};
    reading.left_ui = reading.right_ui = Measured{0.3, 0.01, Bound::exact};
    return std::vector<Reading>(count, reading);
}

}  // namespace

TEST_CASE("a lane meets, fails or stays undecided by its limits") {
    CHECK(judge(fresh(30, 1), required, {}, false).verdict == Verdict::meets);
    CHECK(judge(fresh(10, 1), required, {}, false).verdict == Verdict::fails);
    CHECK(judge(fresh(20.2, 1), required, {}, false).verdict == Verdict::undecided);
    CHECK(judge({}, required, {}, false).verdict == Verdict::undecided);
}

TEST_CASE("an undecided lane is told the bench time that decides") {
    const auto judgement = judge(fresh(20.5, 1), required, {}, false);
    REQUIRE(judgement.deciding_s);
    // 1.96 / sqrt(n) = 0.5 gives n = 15.4 readings: 12 more would do, and come in fours.
    CHECK(*judgement.deciding_s == Approx(1.2));
    const auto repeats = 4 + static_cast<std::size_t>(*judgement.deciding_s / 0.1 + 0.5);
    CHECK(judge(fresh(20.5, 1, repeats), required, {}, false).verdict == Verdict::meets);
    CHECK(judge(fresh(20.5, 1, repeats - 1), required, {}, false).verdict == Verdict::undecided);
}

TEST_CASE("a doubt that is the monitor's step is not sold as a matter of bench time") {
    const auto judgement = judge(fresh(20.4, 0.6), required, {2.0, 0, 0, 0}, false);
    CHECK(judgement.verdict == Verdict::undecided);
    CHECK_FALSE(judgement.deciding_s);
}

TEST_CASE("an extrapolated margin meets only where that is accepted, and says so") {
    auto readings = fresh(30, 1);
    for (auto& reading : readings) reading.basis = Basis::extrapolated;
    CHECK(judge(readings, required, {}, false).verdict == Verdict::undecided);
    const auto accepted = judge(readings, required, {}, true);
    CHECK(accepted.verdict == Verdict::meets);
    CHECK(accepted.reason.find("extrapolated") != std::string::npos);
    CHECK(accepted.score.basis == Basis::extrapolated);
}

TEST_CASE("readings at another error ratio prove only what carries over") {
    Required hard = required;
    hard.error_ratio = 1e-12;
    CHECK(judge(fresh(30, 1), hard, {}, true).verdict == Verdict::undecided);
    CHECK(judge(fresh(10, 1), hard, {}, true).verdict == Verdict::fails);
    // Read at a harder ratio than required: open there is open here, closed there proves nothing.
    Required easy = required;
    easy.error_ratio = 1e-4;
    CHECK(judge(fresh(30, 1), easy, {}, false).verdict == Verdict::meets);
    CHECK(judge(fresh(10, 1), easy, {}, false).verdict == Verdict::undecided);
}

TEST_CASE("a closed or unlocked lane fails") {
    auto closed = fresh(0, 0.5);
    for (auto& reading : closed) {
        reading.status = Status::closed;
        reading.up_mv = Measured{1, 0.5, Bound::at_most};
    }
    CHECK(judge(closed, required, {}, false).verdict == Verdict::fails);
    Reading lost;
    lost.status = Status::no_lock;
    lost.error_ratio = 1e-6;
    const auto judgement = judge(std::vector<Reading>(4, lost), required, {}, false);
    CHECK(judgement.verdict == Verdict::fails);
    CHECK(judgement.reason.find("lock") != std::string::npos);
    auto unsteady = fresh(30, 1);
    unsteady.push_back(lost);
    CHECK(judge(unsteady, required, {}, false).verdict == Verdict::undecided);
}

TEST_CASE("verdicts have the names used everywhere") {
    CHECK(std::string(name_of(Verdict::meets)) == "meets");
    CHECK(std::string(name_of(Verdict::fails)) == "fails");
    CHECK(std::string(name_of(Verdict::undecided)) == "undecided");
}
