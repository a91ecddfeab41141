#include "sim_target/physics/touchstone.hpp"

#include <unistd.h>

#include <catch2/catch.hpp>
#include <cmath>
#include <cstdio>
#include <filesystem>
#include <fstream>
#include <functional>
#include <numbers>

#include "sim_target/physics/truth.hpp"
#include "tests/sim_target/physics_support.hpp"

using namespace lanewright::sim;
using Catch::Matchers::Contains;

namespace {

Line test_line() {
    Line line;
    line.length_mm = 150;
    line.impedance_ohm = 46;
    return line;
}

std::string number(double value) {
    char text[40];
    std::snprintf(text, sizeof text, " %.12g", value);
    return text;
}

// One entry in the format asked for.
std::string entry(const std::string& format, Complex value) {
    const double degrees = std::arg(value) * 180 / std::numbers::pi;
    if (format == "RI") return number(value.real()) + number(value.imag());
    if (format == "MA") return number(std::abs(value)) + number(degrees);
    return number(20 * std::log10(std::abs(value))) + number(degrees);
}

// A file of the line: two ports, or an uncoupled pair as four ports 1, 2 near and 3, 4 far.
std::string file_of(const Line& line, const std::string& unit, double hertz,
                    const std::string& format, bool four, double last_hz) {
    std::string text = "! made from formulas\n# " + unit + " s " + format + " r 50\n";
    const Complex none{1e-12, 0};
    for (double f = 50e6; f <= last_hz * 1.0001; f += 50e6) {
        const Scattering s = scattering_of(chain_of(line, f), 50);
        text += number(f / hertz);
        if (!four) {
            for (const Complex value : {s.s11, s.s21, s.s12, s.s22}) text += entry(format, value);
            text += "\n";
            continue;
        }
        const Complex rows[4][4] = {{s.s11, none, s.s12, none},
                                    {none, s.s11, none, s.s12},
                                    {s.s21, none, s.s22, none},
                                    {none, s.s21, none, s.s22}};
        for (const auto& row : rows) {
            for (const Complex value : row) text += entry(format, value);
            text += " ! row\n ";
        }
        text += "\n";
    }
    return text;
}

struct TemporaryFolder {
    TemporaryFolder() {
        path = std::filesystem::temp_directory_path() /
               ("lanewright-touchstone-" + std::to_string(::getpid()));
        std::filesystem::create_directories(path);
    }
    ~TemporaryFolder() {
        std::error_code ignored;
        std::filesystem::remove_all(path, ignored);
    }
    std::string write(const std::string& name, const std::string& text) const {
        std::ofstream(path / name) << text;
        return (path / name).string();
    }
    std::filesystem::path path;
};

std::string problem_of(const std::string& text, std::size_t ports = 2) {
    try {
        parse_touchstone(text, "x.s2p", ports);
    } catch (const BadData& error) {
        return error.what();
    }
    return "";
}

}  // namespace

TEST_CASE("all formats and units of a file read back as what was written") {
    for (const bool four : {false, true}) {
        const std::size_t ports = four ? 4 : 2;
        for (const std::string format : {"RI", "MA", "DB"}) {
            const Touchstone data =
                parse_touchstone(file_of(test_line(), "MHz", 1e6, format, four, 2e9), "x", ports);
            REQUIRE(data.frequency_hz.size() == 40);
            CHECK(data.frequency_hz[19] == Approx(1e9));
            const Scattering s = scattering_of(chain_of(test_line(), 1e9), 50);
            const std::size_t far = four ? 3 : 2;
            CHECK(std::abs(data.at(19, far, 1) - s.s21) < 1e-9);
            CHECK(std::abs(data.at(19, 1, 1) - s.s11) < 1e-9);
        }
    }
}

// Touchstone File Format Specification 1.1: order of a two-port line and of the rows above two.
TEST_CASE("two ports are f S11 S21 S12 S22 and four ports are row by row") {
    const Touchstone two = parse_touchstone(
        "# GHz S RI R 75\n1 11 0 21 0 12 0 22 0\n"
        "2 11 0 21 0 12 0 22 0\n",
        "x", 2);
    CHECK(two.reference_ohm == 75);
    for (const std::size_t to : {1, 2})
        for (const std::size_t from : {1, 2})
            CHECK(two.at(0, to, from).real() == static_cast<double>(10 * to + from));
    std::string text = "# GHz S RI R 50\n";
    for (const int f : {1, 2}) {
        text += std::to_string(f);
        for (int to = 1; to <= 4; ++to) {
            for (int from = 1; from <= 4; ++from)
                text += " " + std::to_string(10 * to + from) + " 0";
            text += "\n";
        }
    }
    const Touchstone four = parse_touchstone(text, "x", 4);
    for (std::size_t to = 1; to <= 4; ++to)
        for (std::size_t from = 1; from <= 4; ++from)
            CHECK(four.at(1, to, from).real() == static_cast<double>(10 * to + from));
}

TEST_CASE("the first option line counts wherever it stands, and without one the default holds") {
    const std::string data = "1 0.5 30 0.5 30 0.5 30 0.5 30\n2 0.5 30 0.5 30 0.5 30 0.5 30\n";
    const Complex expected{0.4330127018922193, 0.25};  // 0.5 at 30 degrees
    CHECK(std::abs(parse_touchstone(data, "x", 2).at(0, 1, 1) - expected) < 1e-12);
    CHECK(parse_touchstone(data, "x", 2).frequency_hz[0] == 1e9);
    const Touchstone late = parse_touchstone(data + "# kHz s ma r 60\n# Hz S RI R 1\n", "x", 2);
    CHECK(late.frequency_hz[0] == 1e3);
    CHECK(late.reference_ohm == 60);
    CHECK(std::abs(late.at(0, 1, 1) - expected) < 1e-12);
    const std::string decibel = "# GHz S DB\n1 -6.020599913 30 0 0 0 0 0 0\n2 0 0 0 0 0 0 0 0\n";
    CHECK(std::abs(parse_touchstone(decibel, "x", 2).at(0, 1, 1) - expected) < 1e-9);
}

TEST_CASE("noise data after two-port data are left aside") {
    const Touchstone data = parse_touchstone(
        "# GHz S RI R 50\n1 0 0 1 0 1 0 0 0\n2 0 0 1 0 1 0 0 0\n! noise\n1 0.5 0.3 20 0.4\n2 0.6 "
        "0.3 20 0.4\n",
        "x", 2);
    CHECK(data.frequency_hz.size() == 2);
}

TEST_CASE("a file that cannot be understood is refused with its line") {
    const std::string good = "# GHz S RI R 50\n1 0 0 1 0 1 0 0 0\n";
    CHECK_THAT(problem_of(good + "2 0 0 x 0 1 0 0 0\n"), Contains("x.s2p:3: 'x' is no number"));
    CHECK_THAT(problem_of(good + "2 0 0 1 0 1 0 0\n"), Contains("ends inside"));
    CHECK_THAT(problem_of(good), Contains("at least two frequencies"));
    CHECK_THAT(problem_of(""), Contains("at least two frequencies"));
    CHECK_THAT(problem_of("# GHz Y RI R 50\n"), Contains("x.s2p:1: parameters of kind y"));
    CHECK_THAT(problem_of("# GHz S RI R -5\n"), Contains("resistance above zero"));
    CHECK_THAT(problem_of("# parsec S RI R 50\n"), Contains("unknown word 'parsec'"));
    CHECK_THAT(problem_of("[Version] 2.0\n"), Contains("version 2"));
    CHECK_THAT(problem_of(good + "nan 0 0 1 0 1 0 0 0\n"), Contains("is no number"));
    CHECK_THAT(problem_of(good + "2 0 0 1e300 0 1 0 0 0\n"), Contains("above 1e6"));
    CHECK_THAT(problem_of("1e308 0 0 1 0 1 0 0 0\n2 0 0 1 0 1 0 0 0\n"), Contains("bounds"));
    CHECK_THAT(problem_of("1 " + std::string(200, '1') + "z\n"), Contains("is no number"));
    std::string four = "1";
    for (int i = 0; i < 32; ++i) four += " 0.1";
    CHECK_THAT(problem_of(four + "\n" + four + "\n", 4), Contains("must ascend"));
    CHECK_THROWS_AS(read_touchstone("/nonexistent/x.s4p"), BadData);
    CHECK_THROWS_AS(read_touchstone("/tmp/x.s3p"), BadData);
}

TEST_CASE("the stated pairs decide what a four-port is") {
    const Touchstone data =
        parse_touchstone(file_of(test_line(), "Hz", 1, "RI", true, 5e9), "x", 4);
    const MeasuredChannel right = MeasuredChannel::from_four_ports(data, {1, 2}, {3, 4}, "x");
    const Scattering s = scattering_of(chain_of(test_line(), 3e9), 50);
    CHECK(std::abs(right.at(3e9).s21 - s.s21) < 1e-6);
    CHECK(std::abs(right.at(3e9).s11 - s.s11) < 1e-6);
    const MeasuredChannel swapped = MeasuredChannel::from_four_ports(data, {1, 2}, {4, 3}, "x");
    CHECK(std::abs(swapped.at(3e9).s21 + s.s21) < 1e-6);
    const MeasuredChannel crossed = MeasuredChannel::from_four_ports(data, {1, 3}, {2, 4}, "x");
    CHECK(std::abs(crossed.at(3e9).s21) < 1e-6);
    CHECK_THROWS_AS(MeasuredChannel::from_four_ports(data, {1, 2}, {2, 4}, "x"), BadData);
    CHECK_THROWS_AS(MeasuredChannel::from_four_ports(data, {1, 2}, {3, 5}, "x"), BadData);
    CHECK_THROWS_AS(MeasuredChannel::from_two_ports(data, false, "x"), BadData);
}

TEST_CASE("beyond its ends a measured channel goes on as the line it was taken from") {
    const Line line = test_line();
    const Touchstone data = parse_touchstone(file_of(line, "Hz", 1, "RI", false, 15e9), "x", 2);
    const MeasuredChannel channel = MeasuredChannel::from_two_ports(data, false, "x");
    const auto loss_db = [](const Scattering& s) { return -20 * std::log10(std::abs(s.s21)); };
    for (const double f : {20e9, 30e9}) {
        const Scattering exact = scattering_of(chain_of(line, f), 50);
        CHECK(loss_db(channel.at(f)) == Approx(loss_db(exact)).margin(0.3));
        const double phase = std::arg(channel.at(f).s21 / exact.s21);
        // The line's delay goes on falling a little with frequency; the extrapolation's does not.
        CHECK(std::abs(phase) < 0.7);
        CHECK(std::abs(channel.at(f).s11) < std::abs(channel.at(14.9e9).s11) + 0.1);
    }
    const Scattering zero = channel.at(0);
    CHECK(zero.s21.imag() == Approx(0.0).margin(1e-12));
    CHECK(zero.s21.real() == Approx(1.0).margin(0.02));
    // Common practice: a passive channel gives out no more than it takes in.
    for (double f = 0; f < 125e9; f += 0.37e9) {
        const Scattering s = channel.at(f);
        CHECK(std::norm(s.s11) + std::norm(s.s21) <= 1.0 + 1e-3);
    }
}

TEST_CASE("a lane with a file of its own line has the line's eye, and says what it assumed") {
    const TemporaryFolder folder;
    auto json = small_json();
    json.erase("temperature");  // it would warm the line and leave the file alone
    const Line demo = target_of(json).lanes[4].line;
    const std::string four = folder.write("line.s4p", file_of(demo, "GHz", 1e9, "RI", true, 40e9));
    const std::string two = folder.write("line.s2p", file_of(demo, "GHz", 1e9, "DB", false, 40e9));
    const std::vector<int> codes = {4, 4, 5, 0};
    const Margins exact = Oracle(target_of(json), 4).margins(codes, 1e-6);
    for (const std::string& path : {four, two}) {
        json["lanes"][4] = {{"touchstone", {{"file", path}}}};
        const Oracle oracle(target_of(json), 4);
        const Margins margins = oracle.margins(codes, 1e-6);
        CHECK(margins.up_mv == Approx(exact.up_mv).epsilon(0.01));
        CHECK(margins.right_ui == Approx(exact.right_ui).margin(0.01));
        CHECK_THAT(oracle.channel_note(), Contains("0.05 to 40 GHz"));
        CHECK_THAT(oracle.channel_note(), Contains("% of the pulse's energy"));
    }
    json["lanes"][4] = {{"touchstone", {{"file", four}, {"repeat", 2}}}};
    const double loss_db = Oracle(target_of(json), 4).nyquist_loss_db();
    CHECK(loss_db == Approx(2 * matched_loss_db(demo, 12.5e9)).margin(0.5));
    json["lanes"][4] = {{"touchstone", {{"file", (folder.path / "none.s4p").string()}}}};
    CHECK_THROWS_AS(Oracle(target_of(json), 4), BadData);
}
