#include <catch2/catch.hpp>

#include "daemon/engine/lane_machine.hpp"
#include "tests/daemon/bench_fixture.hpp"

using namespace lanewright;
using namespace lanewright::test;

namespace {

LaneMachine machine_for_lane(std::uint16_t lane) {
    return LaneMachine(lane_setup_of(demo_board(), demo_recipe(), Lane{lane}, 1));
}

std::vector<Event> events_of_lane(const Start& start, std::uint16_t lane) {
    std::vector<Event> out;
    for (const StoredEvent& event : start.events) {
        const auto of = lane_of(event.event);
        if (of && number(*of) == lane) out.push_back(event.event);
    }
    return out;
}

}  // namespace

TEST_CASE("A stored run replays to its end through a new machine") {
    EngineBench bench;
    const Start start = bench.start({});
    LaneMachine machine = machine_for_lane(1);
    for (const Event& event : events_of_lane(start, 1)) machine.apply(event);
    CHECK(std::holds_alternative<DoNothing>(machine.next()));
}

TEST_CASE("A machine asks for the same after any prefix of a stored run as was then done") {
    EngineBench bench;
    const Start start = bench.start({});
    const std::vector<Event> events = events_of_lane(start, 0);
    for (std::size_t cut = 1; cut < events.size(); ++cut) {
        LaneMachine machine = machine_for_lane(0);
        for (std::size_t i = 0; i < cut; ++i) machine.apply(events[i]);
        const auto* next_intent = std::get_if<Intent>(&events[cut]);
        if (next_intent == nullptr) continue;
        const Action action = machine.next();
        const auto* measure = std::get_if<DoMeasure>(&action);
        REQUIRE(measure != nullptr);
        CHECK(measure->ordinal == next_intent->ordinal);
        CHECK(measure->request.codes == next_intent->request.codes);
    }
}

TEST_CASE("An altered reading makes the stored run diverge, with the lane and reading named") {
    EngineBench bench;
    const Start start = bench.start({});
    LaneMachine machine = machine_for_lane(0);
    const auto feed = [&] {
        int count = 0;
        for (Event event : events_of_lane(start, 0)) {
            auto* taken = std::get_if<ReadingTaken>(&event);
            if (taken == nullptr || ++count != 4) {
                machine.apply(event);
                continue;
            }
            for (auto* edge : {&taken->reading.up_mv, &taken->reading.down_mv,
                               &taken->reading.left_ui, &taken->reading.right_ui}) {
                (*edge)->value *= 0.05;
            }
            machine.apply(event);
        }
    };
    CHECK_THROWS_WITH(feed(), Catch::Contains("lane 0"));
}

TEST_CASE("A reading that nothing asked for is refused") {
    LaneMachine machine = machine_for_lane(0);
    CHECK_THROWS_AS(machine.apply(ReadingTaken{}), Diverged);
}
