#include "sim_target/monitor/lane_history.hpp"

#include <catch2/catch.hpp>

using namespace lanewright::sim;

namespace {

constexpr double narrow = 0.3, between = 0.67, wide = 0.9;

MonitorOptions monitor_options() {
    MonitorOptions options;
    options.drift_time_s = 400;
    return options;
}

ChipOfTarget chip_options() {
    ChipOfTarget chip;
    chip.lock.lost_above_ui = 0.7;
    chip.lock.regained_below_ui = 0.65;
    chip.lock.landing_sigma_ui = 0.02;
    chip.lock.wander_sigma_ui = 0.006;
    chip.write_effects.return_gain = 0.003;
    chip.write_effects.return_offset_mv = 0.3;
    return chip;
}

struct NewHistory : LaneHistory {
    explicit NewHistory(std::uint64_t seed = 5, int lane = 2)
        : LaneHistory(monitor_options(), chip_options(), seed, lane) {}
};

const FourCodes a = {1, 2, 3, 4}, b = {1, 2, 3, 5}, c = {9, 9, 9, 1};

// All that a reading takes from the record.
std::vector<double> effects(const Standing& s) {
    return {s.time_s,     s.offset_drift, s.phase_drift,      s.wander,
            s.landing_ui, s.return_gain,  s.return_offset_mv, s.locked ? 1.0 : 0.0};
}

std::vector<double> taken(LaneHistory& history, std::uint64_t ordinal, const FourCodes& codes,
                          double spread = narrow, double seconds = 1) {
    const std::vector<double> found = effects(history.begin(ordinal, codes, spread, true));
    history.charge(seconds);
    return found;
}

}  // namespace

TEST_CASE("a reading taken again after a kill finds everything as it was") {
    NewHistory plain, killed;
    std::vector<std::vector<double>> whole;
    for (std::uint64_t i = 0; i < 20; ++i) whole.push_back(taken(plain, i, i % 3 == 0 ? a : b));

    for (std::uint64_t i = 0; i < 10; ++i) taken(killed, i, i % 3 == 0 ? a : b);
    // Two readings are gone; the second was begun and not finished.
    killed.begin(10, b, narrow, true);
    killed.restart();
    for (std::uint64_t i = 9; i < 20; ++i) {
        CHECK(taken(killed, i, i % 3 == 0 ? a : b) == whole[i]);
    }
}

TEST_CASE("looks that are taken again are charged once, and count their turns anew") {
    NewHistory history;
    history.begin(0, a, narrow, true);
    CHECK(history.next_look(3, 4, 20).nth == 0);
    CHECK(history.next_look(3, 4, 20).nth == 1);
    CHECK(history.next_look(3, 5, 20).nth == 0);
    CHECK(history.next_look(3, 5, 21).index == 3);
    history.charge(2);
    history.restart();
    CHECK(history.next_look(3, 4, 20).nth == 0);
    history.charge(1.5);
    history.charge(0.75);
    CHECK(history.begin(1, a, narrow, true).time_s == Approx(2.25));
}

TEST_CASE("what has nothing to do with the lane's own readings changes nothing") {
    NewHistory one, other;
    std::vector<std::vector<double>> first, second;
    for (std::uint64_t i = 0; i < 12; ++i) first.push_back(taken(one, i, i % 2 == 0 ? a : b));
    for (std::uint64_t i = 0; i < 12; ++i) {
        other.restart();
        CHECK(other.locks(c, narrow));
        second.push_back(taken(other, i, i % 2 == 0 ? a : b));
        other.begin(i, i % 2 == 0 ? a : b, narrow, true);
    }
    CHECK(first == second);
    NewHistory lane(5, 3), seed(6, 2);
    CHECK(taken(lane, 0, a) != first[0]);
    CHECK(taken(seed, 0, a) != first[0]);
}

TEST_CASE("the same number with other codes takes the record's place") {
    NewHistory history, straight;
    taken(history, 0, a);
    taken(history, 1, c);
    const std::vector<double> again = taken(history, 1, b);
    taken(straight, 0, a);
    CHECK(taken(straight, 1, b) == again);
}

TEST_CASE("another run that goes its own way is not held to what the one before it did") {
    NewHistory history;
    for (std::uint64_t i = 0; i < 9; ++i) taken(history, i, a);
    const std::vector<double> first = taken(history, 0, a);
    const std::vector<double> second = taken(history, 1, c);
    NewHistory fresh;
    CHECK(taken(fresh, 0, a) == first);
    CHECK(taken(fresh, 1, c) == second);
    // The one before had read a here.
    CHECK(taken(fresh, 2, a) == taken(history, 2, a));
}

TEST_CASE("memory is bounded, and its end is not seen by readings that go on") {
    NewHistory history;
    for (std::uint64_t i = 0; i < 10000; ++i) taken(history, i, i % 2 == 0 ? a : b);
    CHECK(history.current()->time_s == Approx(9999.0));
    const std::vector<double> last = effects(*history.current());
    CHECK(taken(history, 9998, a) != last);
    CHECK(taken(history, 9999, b) == last);
}

TEST_CASE("drift forgets with its time constant and keeps its size") {
    // Pairs of readings one second apart, an hour of bench time between the pairs.
    NewHistory history;
    double squares = 0, differences = 0, apart = 0, before = 0;
    const int pairs = 3000;
    for (int i = 0; i < pairs; ++i) {
        const auto ordinal = static_cast<std::uint64_t>(2 * i);
        const double first = taken(history, ordinal, a, narrow, 1)[1];
        const double second = taken(history, ordinal + 1, a, narrow, 3600)[1];
        squares += first * first;
        differences += (second - first) * (second - first);
        apart += (first - before) * (first - before);
        before = first;
    }
    // Five standard errors of a variance of so many draws.
    const double tolerance = 5 * std::sqrt(2.0 / pairs);
    CHECK(squares / pairs == Approx(1.0).epsilon(tolerance));
    CHECK(differences / pairs == Approx(2 * (1 - std::exp(-1.0 / 400))).epsilon(tolerance));
    CHECK(apart / pairs == Approx(2.0).epsilon(tolerance));
}

TEST_CASE("lock is lost above one spread and found again below another") {
    NewHistory history;
    CHECK_FALSE(history.locks(a, between));  // it has none to keep
    CHECK(history.locks(a, narrow));
    taken(history, 0, a, narrow);
    CHECK(history.locks(b, between));
    CHECK_FALSE(history.locks(b, wide));
    CHECK(taken(history, 1, b, between).back() == 1.0);
    CHECK(taken(history, 2, c, wide).back() == 0.0);
    CHECK(history.locks(c, narrow) == false);  // still the same codes
    CHECK(taken(history, 3, b, between).back() == 0.0);
    CHECK(taken(history, 4, a, narrow).back() == 1.0);
}

TEST_CASE("after a loss of lock the loop lands elsewhere and stays there") {
    double squares = 0;
    const int lanes = 500;
    for (int lane = 0; lane < lanes; ++lane) {
        NewHistory history(5, lane);
        CHECK(history.begin(0, a, narrow, true).landing_ui == 0);
        CHECK(history.begin(1, b, narrow, true).landing_ui == 0);
        history.begin(2, c, wide, true);
        const double landed = history.begin(3, a, narrow, true).landing_ui;
        squares += landed * landed;
        CHECK(history.begin(4, b, narrow, true).landing_ui == landed);
    }
    CHECK(squares / lanes == Approx(4e-4).epsilon(5 * std::sqrt(2.0 / lanes)));
}

TEST_CASE("a reading that never began for want of lock shows as a number left out") {
    NewHistory history;
    history.begin(0, a, narrow, true);
    history.missed_lock();
    CHECK(history.begin(1, b, narrow, true).landing_ui == 0);  // nothing was left out
    history.missed_lock();
    CHECK(history.begin(3, a, narrow, true).landing_ui != 0);
}

TEST_CASE("each stay at a code is off by an error of its own") {
    NewHistory history;
    double gains = 0, offsets = 0;
    const int stays = 1000;
    for (int i = 0; i < stays; ++i) {
        const auto ordinal = static_cast<std::uint64_t>(3 * i);
        const Standing first = history.begin(ordinal, a, narrow, true);
        const Standing second = history.begin(ordinal + 1, a, narrow, true);
        CHECK(first.changed);
        CHECK_FALSE(second.changed);
        CHECK(first.return_gain == second.return_gain);
        CHECK(first.return_offset_mv == second.return_offset_mv);
        gains += std::pow(first.return_gain - 1, 2);
        offsets += std::pow(first.return_offset_mv, 2);
        history.begin(ordinal + 2, b, narrow, true);
    }
    const double tolerance = 5 * std::sqrt(2.0 / stays);
    CHECK(gains / stays == Approx(9e-6).epsilon(tolerance));
    CHECK(offsets / stays == Approx(0.09).epsilon(tolerance));
}

TEST_CASE("codes that change while the loops run make them land worse, by what is stated") {
    ChipOfTarget chip = chip_options();
    chip.write_effects.unheld_landing_ui = 0.06;
    double squares = 0;
    const int lanes = 500;
    for (int lane = 0; lane < lanes; ++lane) {
        LaneHistory history(monitor_options(), chip, 5, lane);
        history.begin(0, a, narrow, true);
        const double landed = history.begin(1, b, narrow, false).landing_ui;
        squares += landed * landed;
        CHECK(history.begin(2, b, narrow, false).landing_ui == landed);
    }
    CHECK(squares / lanes == Approx(36e-4).epsilon(5 * std::sqrt(2.0 / lanes)));
}

TEST_CASE("readings beside the run's own see it as it is and change nothing of it") {
    constexpr std::uint64_t first_beside = 0x80000000u;
    NewHistory plain, watched;
    const auto reference = [&](std::uint64_t ordinal) {
        const std::vector<double> found =
            effects(watched.begin(first_beside + ordinal, c, narrow, true, true));
        watched.charge(5);
        return found;
    };
    std::vector<std::vector<double>> own, seen;
    for (std::uint64_t i = 0; i < 10; ++i) own.push_back(taken(plain, i, i % 2 == 0 ? a : b));
    for (std::uint64_t i = 0; i < 10; ++i) {
        if (i == 4) watched.missed_lock();
        if (i % 3 == 1) seen.push_back(reference(i));
        CHECK(taken(watched, i, i % 2 == 0 ? a : b) == own[i]);
    }
    // It follows the reading before it: a second of bench time, and little drift.
    CHECK(seen[1][0] == own[4][0]);
    CHECK(seen[1][1] == Approx(own[3][1]).margin(5 * std::sqrt(2.0 / 400)));
    CHECK(reference(1) == seen[0]);
    // Nor does it matter how many there were before the run's first reading.
    NewHistory checked;
    for (std::uint64_t i = 0; i < 3; ++i) {
        checked.begin(first_beside + i, i == 1 ? c : a, wide, true, true);
        checked.charge(3);
    }
    for (std::uint64_t i = 0; i < 10; ++i) {
        CHECK(taken(checked, i, i % 2 == 0 ? a : b) == own[i]);
    }
}
