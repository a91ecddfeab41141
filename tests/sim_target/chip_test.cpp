#include "sim_target/board/chip.hpp"

#include <catch2/catch.hpp>

#include "sim_target/board/board.hpp"
#include "sim_target/monitor/monitored_lane.hpp"
#include "tests/sim_target/physics_support.hpp"

using namespace lanewright;
using namespace lanewright::sim;
using namespace std::chrono_literals;

namespace {

// Good for the lanes of little and middling loss.
constexpr int open_lanes = 6;
const std::vector<int> open_codes = {20, 6, 4, 1};

// The demo board with its registers, and a monitor without noise unless told otherwise.
nlohmann::json quiet_json() {
    nlohmann::json json = demo_json();
    json["time_scale"] = 0;
    for (const char* key : {"height_sigma_mv", "width_sigma_ui", "height_drift_mv",
                            "width_drift_ui", "event_share"}) {
        json["monitor"][key] = 0;
    }
    for (const char* key : {"return_offset_mv", "return_gain", "unheld_landing_ui"}) {
        json["write_effects"][key] = 0;
    }
    json["lock"]["wander_sigma_ui"] = 0;
    return json;
}

nlohmann::json failing(const char* what, nlohmann::json how) {
    nlohmann::json json = quiet_json();
    json["failures"] = {{what, std::move(how)}};
    return json;
}

struct DemoChip {
    boost::asio::io_context io;
    VirtualTimeSource time{io};
    BoardSide side;
    std::unique_ptr<Chip> chip;

    explicit DemoChip(const nlohmann::json& json) {
        Complaints complaints;
        const std::string path = LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json";
        const auto target = parse_target(json.dump(), path, complaints, [&](const Object& top) {
            side = decode_board_side(top, LANEWRIGHT_SOURCE_DIR "/configs/targets");
        });
        INFO(complaints.text());
        REQUIRE(target);
        const ChipOptions options{.time_scale = target->time_scale,
                                  .bit_rate_hz = target->grid.bit_rate_hz,
                                  .reset_codes = target->reset_codes,
                                  .temperature_c = target->temperature.celsius,
                                  .chip = target->chip};
        chip = std::make_unique<Chip>(time, side, options, make_lane_models(*target));
    }

    std::uint32_t address(const std::string& reg, int lane) const {
        const RegisterDescription* found = side.map.find(reg);
        REQUIRE(found != nullptr);
        if (!found->per_lane) return found->address;
        return side.map.lane_base + static_cast<std::uint32_t>(lane) * side.map.lane_stride +
               found->address;
    }
    std::uint32_t read(const std::string& reg, const std::string& field, int lane = 0) {
        const FieldDescription* found = side.map.find(FieldName{reg, field});
        REQUIRE(found != nullptr);
        std::uint32_t value = 0;
        REQUIRE(chip->registers().read(address(reg, lane), value) == Outcome::done);
        return (value & found->mask()) >> found->low_bit;
    }
    void write(const std::string& reg, std::uint32_t value, int lane = 0) {
        REQUIRE(chip->registers().write(address(reg, lane), std::nullopt, value) == Outcome::done);
    }
    void put(int lane, const std::vector<int>& codes, bool held = true) {
        write("RX_CTL", held ? 0x81 : 0x80, lane);
        const char* const regs[] = {"EQ_R1", "EQ_C1", "EQ_R2", "EQ_C2"};
        for (std::size_t i = 0; i < 4; ++i) {
            write(regs[i], static_cast<std::uint32_t>(codes[i]), lane);
        }
        write("EQ_LOAD", 1, lane);
        write("RX_CTL", 0x80, lane);
    }
    // In steps from the origin; the share of errors by the bits that the chip says it counted.
    double look(int lane, int offset, int phase, std::uint32_t log2 = 16) {
        start_look(lane, offset, phase, log2);
        return shown(lane);
    }
    void start_look(int lane, int offset, int phase, std::uint32_t log2) {
        const std::uint32_t at = read("RX_ORIGIN", "offset", lane) + static_cast<unsigned>(offset);
        const std::uint32_t when = read("RX_ORIGIN", "phase", lane) + static_cast<unsigned>(phase);
        write("MON_SETUP", log2, lane);
        write("MON_POINT", (at & 0x1FFu) | when << 9u, lane);
        write("MON_COUNT", 1, lane);
    }
    double shown(int lane) {
        return read("MON_ERRORS", "count", lane) / std::exp2(read("MON_BITS", "log2", lane));
    }
    double reading(int lane, std::uint32_t ordinal, int offset, int phase,
                   std::uint32_t log2 = 16) {
        write("NOTE", ordinal, lane);
        return look(lane, offset, phase, log2);
    }
    // The first offset above the origin at which more than one bit in a hundred is wrong.
    int edge(int lane) {
        int offset = 0;
        while (look(lane, offset, 0) < 0.01) ++offset;
        return offset;
    }
    void pass(std::chrono::nanoseconds span) { run_until_done(time, sleep(time, span)); }
    static Task<void> sleep(TimeSource& source, std::chrono::nanoseconds span) {
        co_await source.sleep_until(source.now() + span);
        co_return Result<void>{};
    }
};

}  // namespace

TEST_CASE("a sound chip says so in every status that a check can read") {
    DemoChip chip(quiet_json());
    CHECK(chip.read("CLOCK", "present") == 1);
    CHECK(chip.read("CLOCK", "ppm_ok") == 1);
    CHECK(chip.read("SENTINEL", "value") == 0);
    chip.write("SENTINEL", 0xCAFE1234);
    CHECK(chip.read("SENTINEL", "value") == 0xCAFE1234);
    CHECK(chip.read("SUPPLY", "value") == 900);
    const double celsius = demo_json().contains("temperature")
                               ? demo_json()["temperature"]["celsius"].get<double>()
                               : demo_json()["noise"]["temperature_k"].get<double>() - 273.15;
    CHECK(chip.read("TEMPERATURE", "value") == std::lround((celsius + 0.5 + 64) * 4));
    for (int lane = 0; lane < open_lanes; ++lane) {
        chip.put(lane, open_codes);
        CHECK(chip.read("RX_STATUS", "lock", lane) == 1);
        CHECK(chip.read("RX_STATUS", "pattern_sync", lane) == 1);
        CHECK(chip.read("RX_STATUS", "inverted", lane) == 0);
        CHECK(chip.read("RX_STATUS", "loops_running", lane) == 1);
        CHECK(chip.read("LANE_TAG", "value", lane) == static_cast<unsigned>(lane));
        CHECK(chip.look(lane, 0, 0) < 1e-3);
        CHECK(chip.look(lane, 200, 0) == Approx(0.5).epsilon(0.05));
        CHECK(chip.look(lane, 0, 0, 12) <= 1);
        CHECK(chip.read("MON_BITS", "log2", lane) == 12);
    }
    chip.write("RX_CTL", 0x81, 3);
    CHECK(chip.read("RX_STATUS", "loops_running", 3) == 0);
    chip.chip->reset();
    CHECK(chip.read("SENTINEL", "value") == 0);
    CHECK(chip.read("RX_LOSSES", "count", 0) == 0);
}

TEST_CASE("a counter stops at its top and says so") {
    DemoChip chip(quiet_json());
    chip.put(0, open_codes);
    chip.look(0, 200, 0, 20);
    CHECK(chip.read("MON_ERRORS", "saturated") == 0);
    chip.look(0, 200, 0, 30);
    CHECK(chip.read("MON_ERRORS", "saturated") == 1);
    CHECK(chip.read("MON_ERRORS", "count") == 0xFFFFFF);
}

TEST_CASE("a counted look appears after its dwell, and the monitor is busy until then") {
    nlohmann::json json = quiet_json();
    json["time_scale"] = 1;
    DemoChip chip(json);
    chip.put(0, open_codes);
    chip.pass(2ms);
    chip.start_look(0, 200, 0, 30);  // 43 ms
    CHECK(chip.read("MON_STATUS", "busy") == 1);
    CHECK(chip.read("MON_STATUS", "busy", 1) == 1);  // they share it
    CHECK(chip.read("MON_STATUS", "busy", 2) == 0);
    CHECK(chip.read("MON_ERRORS", "count") == 0);
    chip.start_look(1, 0, 0, 20);
    chip.pass(43ms);
    CHECK(chip.read("MON_STATUS", "busy") == 0);
    CHECK(chip.read("MON_ERRORS", "count") == 0xFFFFFF);
    CHECK(chip.read("MON_BITS", "log2", 1) == 0);  // its start found the monitor at work
}

TEST_CASE("a reading taken again is the same, whatever other lanes and readings did between") {
    const nlohmann::json json = [] {
        nlohmann::json all_on = demo_json();
        all_on["time_scale"] = 0;
        return all_on;
    }();
    DemoChip chip(json), other(json);
    const auto take = [](DemoChip& from, int lane, std::uint32_t ordinal) {
        from.put(lane, ordinal % 2 == 0 ? open_codes : std::vector<int>{21, 6, 4, 1});
        from.write("NOTE", ordinal, lane);
        std::vector<double> seen;
        for (const int offset : {20, 30, 40, 50}) seen.push_back(from.look(lane, offset, 0, 20));
        from.write("MON_SETUP", 0x600 + 26, lane);
        from.write("MON_START", 1, lane);
        for (const char* reg : {"MON_UP", "MON_DOWN", "MON_LEFT", "MON_RIGHT"}) {
            seen.push_back(from.read(reg, "steps", lane));
        }
        return seen;
    };
    std::vector<std::vector<double>> first;
    for (std::uint32_t i = 0; i < 6; ++i) first.push_back(take(chip, 4, i));
    CHECK(first[0] != first[2]);
    for (std::uint32_t i = 0; i < 6; ++i) {
        take(other, 5, i);
        if (i == 4) {
            // Killed in mid-reading, restored, and the board was reset, too.
            other.put(4, open_codes);
            other.write("NOTE", 4, 4);
            other.look(4, 20, 0, 20);
            other.put(4, {28, 3, 2, 3});
            other.write("NOTE", 0, 4);
            other.chip->reset();
        }
        CHECK(take(other, 4, i) == first[i]);
    }
}

TEST_CASE("a reset to codes without lock changes no reading that follows it") {
    nlohmann::json json = demo_json();
    json["time_scale"] = 0;
    DemoChip straight(json), fallen(json);
    const auto take = [](DemoChip& from, std::uint32_t ordinal) {
        from.put(4, open_codes);
        from.write("NOTE", ordinal, 4);
        std::vector<double> seen;
        for (const int phase : {-18, -14, 14, 18}) seen.push_back(from.look(4, 0, phase, 20));
        return seen;
    };
    CHECK(take(straight, 1) == take(fallen, 1));
    fallen.write("NOTE", 3, 4);  // it strikes between the number and the first look
    fallen.chip->reset();
    CHECK(fallen.read("RX_STATUS", "lock", 4) == 0);
    for (const std::uint32_t ordinal : {3u, 4u}) {
        CHECK(take(straight, ordinal) == take(fallen, ordinal));
    }
}

TEST_CASE("switch: without a reference clock it is not there and nothing has lock") {
    DemoChip absent(failing("reference_clock", "absent"));
    absent.put(0, open_codes);
    CHECK(absent.read("CLOCK", "present") == 0);
    CHECK(absent.read("CLOCK", "ppm_ok") == 0);
    CHECK(absent.read("RX_STATUS", "lock") == 0);
    DemoChip off(failing("reference_clock", "off"));
    off.put(0, open_codes);
    CHECK(off.read("CLOCK", "present") == 1);
    CHECK(off.read("CLOCK", "ppm_ok") == 0);
    CHECK(off.read("RX_STATUS", "lock") == 1);
}

TEST_CASE("switch: a lane without lock") {
    DemoChip chip(failing("no_lock", {2}));
    chip.put(2, open_codes);
    chip.put(3, open_codes);
    CHECK(chip.read("RX_STATUS", "lock", 2) == 0);
    CHECK(chip.read("RX_STATUS", "lock", 3) == 1);
    CHECK(chip.look(2, 0, 0) == Approx(0.5).epsilon(0.05));
}

TEST_CASE("switch: a pattern checker out of sync, and one with the wrong polarity") {
    DemoChip lost(failing("pattern_out_of_sync", {1}));
    lost.put(1, open_codes);
    CHECK(lost.read("RX_STATUS", "pattern_sync", 1) == 0);
    CHECK(lost.look(1, 0, 0) == Approx(0.5).epsilon(0.05));
    DemoChip inverted(failing("inverted", {1}));
    inverted.put(1, open_codes);
    CHECK(inverted.read("RX_STATUS", "pattern_sync", 1) == 1);
    CHECK(inverted.read("RX_STATUS", "inverted", 1) == 1);
    CHECK(inverted.look(1, 0, 0) > 0.99);
}

TEST_CASE("switch: lanes swapped, with all that is behind them") {
    DemoChip straight(quiet_json()), crossed(failing("swapped", {{0, 6}}));
    CHECK(crossed.read("LANE_TAG", "value", 0) == 6);
    CHECK(crossed.read("LANE_TAG", "value", 6) == 0);
    CHECK(crossed.read("LANE_TAG", "value", 1) == 1);
    straight.put(6, open_codes);
    crossed.put(0, open_codes);
    CHECK(crossed.edge(0) == straight.edge(6));
}

TEST_CASE("switch: loops that never run") {
    DemoChip chip(failing("loops_off", {5}));
    chip.put(5, open_codes);
    CHECK(chip.read("RX_STATUS", "loops_running", 5) == 0);
    CHECK(chip.read("RX_STATUS", "loops_running", 4) == 1);
}

TEST_CASE("switch: a monitor that shows too few errors far outside") {
    DemoChip chip(failing("too_few_errors", {0}));
    chip.put(0, open_codes);
    CHECK(chip.look(0, 200, 0) < 0.2);
    CHECK(chip.look(0, -200, 0) < 0.2);
    CHECK(chip.look(0, 0, 0) < 1e-3);
}

TEST_CASE("switch: other bits than the dwell says") {
    DemoChip chip(failing("wrong_bits", {0}));
    chip.put(0, open_codes);
    chip.look(0, 200, 0, 20);
    CHECK(chip.read("MON_BITS", "log2") == 17);
    CHECK(chip.read("MON_ERRORS", "count") == Approx(65536).epsilon(0.05));
}

TEST_CASE("switch: counts that fall again from the centre outwards") {
    const auto worst_fall = [](const nlohmann::json& json) {
        DemoChip chip(json);
        chip.put(3, open_codes);
        double most = 0, fall = 0;
        for (int offset = 0; offset < 120; offset += 4) {
            const double here = chip.look(3, offset, 0);
            fall = std::max(fall, most - here);
            most = std::max(most, here);
        }
        return fall;
    };
    CHECK(worst_fall(quiet_json()) < 0.01);
    CHECK(worst_fall(failing("not_monotone", {3})) > 0.1);
}

TEST_CASE("switch: repeatability, return error and settling worse by a factor") {
    const auto spread = [](const nlohmann::json& json, bool leave) {
        DemoChip chip(json);
        chip.put(3, open_codes);
        const int edge = chip.edge(3);
        double sum = 0, squares = 0;
        const int readings = 30;
        for (int i = 0; i < readings; ++i) {
            if (leave) {
                chip.put(3, {21, 6, 4, 1});
                chip.reading(3, 1000u + 2u * static_cast<unsigned>(i), edge, 0);
                chip.put(3, open_codes);
            }
            const double share =
                chip.reading(3, 1001u + 2u * static_cast<unsigned>(i), edge, 0, 22);
            sum += share;
            squares += share * share;
        }
        return std::sqrt((squares - sum * sum / readings) / readings);
    };
    nlohmann::json noisy = quiet_json(), returns = quiet_json();
    noisy["monitor"]["height_sigma_mv"] = 0.1;
    returns["write_effects"]["return_offset_mv"] = 0.1;
    const double noise = spread(noisy, false), error = spread(returns, true);
    noisy["failures"] = {{"repeatability_times", 10}};
    returns["failures"] = {{"return_error_times", 10}};
    CHECK(spread(noisy, false) > 5 * noise);
    CHECK(spread(returns, true) > 5 * error);

    nlohmann::json slow = quiet_json();
    const auto after_pause = [](const nlohmann::json& json, double seconds) {
        DemoChip chip(json);
        chip.put(3, {21, 6, 4, 1});
        chip.reading(3, 1, 0, 0);
        chip.put(3, open_codes);
        chip.chip->paused(3, 1);
        const int edge = chip.edge(3);
        chip.put(3, {21, 6, 4, 1});
        chip.reading(3, 2, 0, 0);
        chip.put(3, open_codes);
        chip.chip->paused(3, seconds);
        return chip.reading(3, 3, edge, 0, 22);
    };
    const double settled = after_pause(slow, 1);
    CHECK(after_pause(slow, 1e-3) == Approx(settled).epsilon(0.02));
    slow["failures"] = {{"settle_times", 100}};
    CHECK(after_pause(slow, 1e-3) > 1.5 * settled);
    CHECK(after_pause(slow, 1) == Approx(settled).epsilon(0.02));
}

TEST_CASE("switch: monitors at work side by side disturb each other") {
    nlohmann::json json = failing("parallel_offset_mv", 6);
    json["time_scale"] = 1;
    DemoChip chip(json);
    for (const int lane : {2, 4}) chip.put(lane, open_codes);
    chip.pass(2ms);
    const auto count = [&](int lane, int offset, std::uint32_t log2) {
        chip.write("NOTE", 1, lane);
        chip.start_look(lane, offset, 0, log2);
    };
    int edge = 0;
    do {
        count(2, ++edge, 22);
        chip.pass(1ms);
    } while (chip.shown(2) < 0.01);
    const double alone = chip.shown(2);
    count(2, edge, 22);
    count(4, 0, 22);
    chip.pass(1ms);
    CHECK(chip.shown(2) > 1.3 * alone);
    count(2, edge, 22);
    chip.pass(1ms);
    CHECK(chip.shown(2) == Approx(alone).epsilon(0.05));
}

TEST_CASE("switch: something else writes a code, once or again and again") {
    DemoChip chip(
        failing("foreign_writes",
                {{{"lane", 2}, {"dimension", "c1"}, {"code", 11}, {"at_batches", {4, 7}}}}));
    chip.put(2, open_codes);
    const int edge = chip.edge(2);
    const double before = chip.look(2, edge, 0, 20);
    for (const std::uint64_t batch : {1u, 2u, 3u}) CHECK_FALSE(chip.chip->foreign_writes(batch));
    CHECK(chip.read("EQ_C1", "code", 2) == 6);
    CHECK(chip.chip->foreign_writes(4));
    CHECK(chip.read("EQ_C1", "code", 2) == 11);
    CHECK(chip.read("EQ_C1", "code", 1) == 3);
    CHECK(std::abs(chip.look(2, edge, 0, 20) - before) > 0.1 * before);  // it has taken effect
    chip.put(2, open_codes);
    CHECK_FALSE(chip.chip->foreign_writes(6));
    CHECK(chip.read("EQ_C1", "code", 2) == 6);
    CHECK(chip.chip->foreign_writes(7));
    CHECK(chip.read("EQ_C1", "code", 2) == 11);
}

TEST_CASE("lock losses are counted, and lock comes back with codes that have it") {
    nlohmann::json json = quiet_json();
    DemoChip chip(json);
    chip.put(7, {12, 9, 8, 0});
    REQUIRE(chip.read("RX_STATUS", "lock", 7) == 1);
    CHECK(chip.read("RX_LOSSES", "count", 7) == 0);
    chip.put(7, {31, 0, 0, 7});
    CHECK(chip.read("RX_STATUS", "lock", 7) == 0);
    CHECK(chip.read("RX_LOSSES", "count", 7) == 1);
    CHECK(chip.look(7, 0, 0) == Approx(0.5).epsilon(0.05));
    chip.put(7, {12, 9, 8, 0});
    CHECK(chip.read("RX_STATUS", "lock", 7) == 1);
}

TEST_CASE("a binding names fields of the right kind, and a whole counter") {
    const auto complaints_of = [](const nlohmann::json& json) {
        Complaints complaints;
        parse_target(json.dump(), LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json", complaints,
                     [](const Object& top) {
                         decode_board_side(top, LANEWRIGHT_SOURCE_DIR "/configs/targets");
                     });
        return complaints.text();
    };
    nlohmann::json json = quiet_json();
    CHECK(complaints_of(json).empty());
    json["binding"]["supply"] = "LANE_TAG.value";
    json["binding"]["losses"] = "CLOCK.present";
    json["binding"].erase("phase");
    const std::string text = complaints_of(json);
    using Catch::Matchers::Contains;
    CHECK_THAT(text, Contains("/binding/supply"));
    CHECK_THAT(text, Contains("a field of the whole board"));
    CHECK_THAT(text, Contains("/binding/losses"));
    CHECK_THAT(text, Contains("no key \"phase\""));
}

TEST_CASE("something else writes in mid-batch, where the batch's end can see it") {
    boost::asio::io_context io;
    VirtualTimeSource time(io);
    const nlohmann::json json = failing(
        "foreign_writes", {{{"lane", 0}, {"dimension", "r1"}, {"code", 5}, {"at_batches", {2}}}});
    Complaints complaints;
    BoardSide side;
    const auto target =
        parse_target(json.dump(), LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json", complaints,
                     [&](const Object& top) {
                         side = decode_board_side(top, LANEWRIGHT_SOURCE_DIR "/configs/targets");
                     });
    REQUIRE(target);
    sim::Board board(time, side,
                     {.time_scale = 0,
                      .bit_rate_hz = target->grid.bit_rate_hz,
                      .reset_codes = target->reset_codes,
                      .temperature_c = 25,
                      .chip = target->chip},
                     make_lane_models(*target), 9);
    struct Last final : Port {
        void send(Octets payload) override { last = std::move(payload); }
        Octets last;
    };
    const auto port = std::make_shared<Last>();
    const auto batch = [&](std::uint16_t count) {
        Writer writer;
        writer.octet(2);
        writer.varint(0);
        writer.two(count);
        writer.two(77);
        writer.varint(9);
        // EQ_R1 of lane 0, at 100 hexadecimal, read twice.
        writer.append(Octets{0x10, 0x80, 0x04, 0x00});
        REQUIRE(board.received(port, writer.take(), 0));
        run_until_done(time, DemoChip::sleep(time, 1ms));
        return port->last;
    };
    Writer hello;
    hello.octet(1);
    hello.octet(0);
    hello.octet(1);
    hello.four(77);
    REQUIRE(board.received(port, hello.take(), 0));
    const Octets first = batch(1), second = batch(2);
    INFO("first " << first.size() << ", second " << second.size());
    REQUIRE(first.size() >= 2);
    CHECK(first[first.size() - 2] == 28);
    CHECK(first.back() == 28);
    CHECK(second[second.size() - 2] == 28);
    CHECK(second.back() == 5);
    run_until_done(time, board.stop());
}
