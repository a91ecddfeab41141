// Worked cases A and B: nodal analysis of the stated networks, computed twice (double precision and
// a circuit simulator), which agree to 5e-11 dB. The expressions themselves: Hall & Heck, Advanced
// Signal Integrity for High-Speed Digital Designs, Wiley 2009, section 12.2.1.

#include <catch2/catch.hpp>
#include <cmath>

#include "adapt/search/response.hpp"
#include "adapt/stats/random.hpp"
#include "tests/adapt/bench_of_one.hpp"

using namespace lanewright;

namespace {

constexpr Network case_a{400, 400e-15, 400, 50e-15};
constexpr Network case_b{600, 250e-15, 200, 20e-15};
constexpr Surroundings around_b{25, 30e-15, 0, 0, 0, 0, 0};

struct Point {
    double ghz, a_db, a_degrees, b_db, b_degrees;
};
constexpr Point points[] = {
    {0.001, -6.020597, 0.02520, -12.308476, 0.03655},
    {0.1, -5.990794, 2.50416, -12.273945, 3.63915},
    {0.3, -5.765743, 7.15461, -12.009200, 10.56520},
    {1, -4.192240, 15.66413, -9.919005, 26.33230},
    {2, -2.571699, 15.03905, -7.050978, 30.51656},
    {4, -1.537767, 9.88506, -4.339543, 23.70162},
    {8, -1.163606, 5.37694, -2.961172, 12.40590},
    {16, -1.059027, 2.74948, -2.532818, 2.53498},
    {40, -1.028846, 1.10685, -2.596935, -10.24934},
};

double db(std::complex<double> gain) {
    return 20 * std::log10(std::abs(gain));
}
double degrees(std::complex<double> gain) {
    return std::arg(gain) * 180 / M_PI;
}

double db_at(const Network& network, double ghz) {
    return db(transfer(network, {}, ghz * 1e9).value());
}

}  // namespace

TEST_CASE("transfer matches the worked cases at every frequency") {
    for (const auto& point : points) {
        const auto a = transfer(case_a, {}, point.ghz * 1e9).value();
        CHECK(db(a) == Approx(point.a_db).margin(1e-6));
        CHECK(degrees(a) == Approx(point.a_degrees).margin(1e-5));
        const auto b = transfer(case_b, around_b, point.ghz * 1e9).value();
        CHECK(db(b) == Approx(point.b_db).margin(1e-6));
        CHECK(degrees(b) == Approx(point.b_degrees).margin(1e-5));
    }
}

TEST_CASE("the ideal response of case A matches") {
    const auto response = response_of(case_a).value();
    CHECK(response.zero_ghz == Approx(0.994718).margin(1e-6));
    CHECK(response.pole_ghz == Approx(1.768388).margin(1e-6));
    CHECK(response.dc_db == Approx(-6.020600).margin(1e-6));
    CHECK(response.hf_db == Approx(-1.023050).margin(1e-6));
    CHECK(response.peaking_db == Approx(4.997549).margin(1.5e-6));
    CHECK(response.level_ohm == 800);
}

TEST_CASE("leaving C2 out overstates peaking and pole by the stated amounts") {
    const auto exact = response_of(case_a).value();
    const auto rough = response_without_c2(case_a).value();
    CHECK(rough.pole_ghz == Approx(1.989437).margin(1e-6));
    CHECK(rough.peaking_db == Approx(6.020600).margin(1e-6));
    CHECK(rough.hf_db == 0);
    CHECK(rough.peaking_db - exact.peaking_db == Approx(20 * std::log10(450.0 / 400)));
    CHECK(rough.pole_ghz / exact.pole_ghz == Approx(1 + 50.0 / 400));
}

TEST_CASE("source and load of case B give the stated poles and peak") {
    const auto loaded = loaded_response(case_b, around_b).value();
    CHECK(loaded.zero_ghz == Approx(1.061033).margin(1e-6));
    CHECK(loaded.low_pole_ghz == Approx(3.348622).margin(1e-6));
    CHECK(loaded.high_pole_ghz == Approx(166.41665).margin(1e-5));
    CHECK(loaded.dc_db == Approx(-12.308479).margin(1e-6));
    CHECK(loaded.peak_ghz.value() == Approx(22.96554).margin(1e-5));
    CHECK(loaded.peak_db.value() == Approx(-2.489769).margin(1e-6));

    const auto no_source = loaded_response(case_b, {0, 30e-15, 0, 0, 0, 0, 0}).value();
    CHECK(no_source.low_pole_ghz == Approx(3.536777).margin(1e-6));
    CHECK(std::isinf(no_source.high_pole_ghz));
    CHECK_FALSE(no_source.peak_ghz);
    const Network with_load{600, 250e-15, 200, 50e-15};
    const auto ideal = response_of(with_load).value();
    CHECK(ideal.dc_db == Approx(-12.041200).margin(1e-6));
    CHECK(ideal.hf_db == Approx(-1.583625).margin(1e-6));
    CHECK(ideal.peaking_db == Approx(10.457575).margin(1e-6));
    CHECK(response_without_c2(with_load)->pole_ghz == Approx(4.244132).margin(1e-6));
}

TEST_CASE("the step response of case A matches") {
    CHECK(step_response(case_a, 0).value() == Approx(0.88888889).margin(1e-8));
    CHECK(step_response(case_a, 10e-12).value() == Approx(0.84799307).margin(1e-8));
    CHECK(step_response(case_a, 90e-12).value() == Approx(0.64306423).margin(1e-8));
    CHECK(step_response(case_a, 500e-12).value() == Approx(0.50150341).margin(1e-8));
    CHECK(step_response(case_a, 1e-9).value() == Approx(0.50000581).margin(1e-8));
    CHECK(step_response(case_a, -1e-12).value() == 0);
}

TEST_CASE("process and temperature move the zero and leave the attenuations") {
    struct Corner {
        double r, c, zero_ghz, at_1_ghz_db, at_4_ghz_db;
    };
    const Corner corners[] = {{1.20, 1.15, 0.720810, -3.425327, -1.308564},
                              {1.00, 1.00, 0.994718, -4.192240, -1.537767},
                              {0.80, 0.85, 1.462821, -4.954246, -2.009004},
                              {1.20, 0.85, 0.975214, -4.147237, -1.519940},
                              {0.80, 1.15, 1.081216, -4.376482, -1.619088}};
    for (const auto& corner : corners) {
        const Network network{case_a.r1_ohm * corner.r, case_a.c1_farad * corner.c,
                              case_a.r2_ohm * corner.r, case_a.c2_farad * corner.c};
        const auto response = response_of(network).value();
        CHECK(response.zero_ghz == Approx(corner.zero_ghz).margin(1e-6));
        CHECK(response.dc_db == Approx(-6.020600).margin(1e-6));
        CHECK(response.hf_db == Approx(-1.023050).margin(1e-6));
        CHECK(db_at(network, 1) == Approx(corner.at_1_ghz_db).margin(1e-6));
        CHECK(db_at(network, 4) == Approx(corner.at_4_ghz_db).margin(1e-6));
    }
}

// Common practice: a network of resistors and capacitors alone never amplifies; peaking is the
// difference of the two attenuations, and positive if and only if R1 C1 > R2 C2.
TEST_CASE("no network amplifies at any frequency, and peaking follows the time constants") {
    Random random({3, 0, 0, 0});
    const auto spread = [&](double low, double high) {
        return low * std::pow(high / low, random.uniform());
    };
    for (int i = 0; i < 2000; ++i) {
        const Network network{spread(10, 10'000), spread(1e-15, 1e-12), spread(10, 10'000),
                              spread(1e-15, 1e-12)};
        const Surroundings around{spread(0.1, 200), spread(1e-16, 1e-13), 1 / spread(20, 1e5),
                                  spread(0.1, 100), spread(0.1, 100),     spread(0.1, 100),
                                  spread(0.1, 100)};
        const auto response = response_of(network).value();
        CHECK(response.dc_db <= 0);
        CHECK(response.hf_db <= 0);
        CHECK(response.peaking_db == response.hf_db - response.dc_db);
        CHECK((response.peaking_db > 0) ==
              (network.r1_ohm * network.c1_farad > network.r2_ohm * network.c2_farad));
        CHECK(response.pole_ghz / response.zero_ghz ==
              Approx(std::pow(10, response.peaking_db / 20)));
        const double frequency_hz = spread(1e6, 1e12);
        CHECK(std::abs(transfer(network, {}, frequency_hz).value()) <= 1 + 1e-12);
        CHECK(std::abs(transfer(network, around, frequency_hz).value()) <= 1 + 1e-12);
    }
}

TEST_CASE("a response and its network are each other's inverse") {
    const auto back = network_of(response_of(case_b).value()).value();
    CHECK(back.r1_ohm == Approx(case_b.r1_ohm));
    CHECK(back.c1_farad == Approx(case_b.c1_farad));
    CHECK(back.r2_ohm == Approx(case_b.r2_ohm));
    CHECK(back.c2_farad == Approx(case_b.c2_farad));
    CHECK_FALSE(network_of(Response{}));
}

TEST_CASE("elements that cannot be give no response") {
    CHECK_FALSE(response_of(Network{0, 1e-15, 100, 1e-15}));
    CHECK_FALSE(response_of(Network{100, -1e-15, 100, 1e-15}));
    CHECK_FALSE(response_of(Network{100, std::nan(""), 100, 1e-15}));
    CHECK_FALSE(transfer(case_a, {-1, 0, 0, 0, 0, 0, 0}, 1e9));
    CHECK_FALSE(transfer(case_a, {}, -1));
    CHECK_FALSE(step_response(Network{}, 1));
    CHECK_FALSE(loaded_response(Network{}, {}));
    CHECK_FALSE(response_without_c2(Network{}));
}

TEST_CASE("the response of codes needs all four tables") {
    const auto space = tests::equalizer_space();
    const Codes codes{{9, 15, 15, 0}};
    const auto response = response_of(space, codes).value();
    CHECK(response.level_ohm == Approx(space.nominal(0, 9).value() + space.nominal(1, 15).value()));
    CHECK(response.hf_db == Approx(20 * std::log10(420.0 / 423)));
    CHECK_FALSE(response_of(space, Codes{{32, 0, 0, 0}}));
    CHECK_FALSE(response_of(space, Codes{{1}}));
    CHECK_FALSE(response_of(tests::plain_space({4, 4}), Codes{{1, 1}}));
}
