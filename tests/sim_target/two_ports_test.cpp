#include "sim_target/physics/two_ports.hpp"

#include <catch2/catch.hpp>
#include <cmath>

#include "sim_target/physics/link.hpp"
#include "sim_target/physics/truth.hpp"
#include "tests/sim_target/physics_support.hpp"

using namespace lanewright::sim;

namespace {

double transfer_db(const Chain& chain) {
    return 20 * std::log10(std::abs(scattering_of(chain, 50).s21));
}

double score_of(const nlohmann::json& json) {
    const TargetFile target = target_of(json);
    return score(Oracle(target, 3).margins({4, 4, 5, 0}, 1e-6), target.required);
}

}  // namespace

TEST_CASE("an open stub takes most where it is a quarter wave long") {
    const Stub stub;
    const double notch = notch_hz(stub);
    // c/(4·1 mm·sqrt(3.7)) = 38.96 GHz
    CHECK(notch == Approx(38.96e9).epsilon(1e-3));
    CHECK(transfer_db(chain_of(stub, notch)) < -20);
    CHECK(transfer_db(chain_of(stub, 0.98 * notch)) > transfer_db(chain_of(stub, notch)));
    CHECK(transfer_db(chain_of(stub, 1.02 * notch)) > transfer_db(chain_of(stub, notch)));
    CHECK(transfer_db(chain_of(stub, 0.01 * notch)) == Approx(0).margin(0.01));
}

TEST_CASE("a step to the same impedance is none, and a step to another reflects") {
    Line line, stepped, other;
    stepped.steps = {{0.3, 50}, {0.7, 50}};
    other.steps = {{0.3, 60}};
    for (const double f : {1e9, 7.3e9, 25e9}) {
        const Scattering plain = scattering_of(chain_of(line, f), 50);
        CHECK(std::abs(scattering_of(chain_of(stepped, f), 50).s21 - plain.s21) < 1e-9);
        CHECK(std::abs(scattering_of(chain_of(other, f), 50).s21 - plain.s21) > 1e-4);
    }
}

// Hammerstad and Jensen 1980: twice the loss where the skin is thin, none where it is thick.
TEST_CASE("roughness doubles the skin effect's resistance at most") {
    const double sigma = 5.8e7, f = 10e9;
    const double depth_um = 1e6 / (sigma * surface_resistance_ohm(f, sigma));
    CHECK(depth_um == Approx(0.660855).epsilon(1e-4));
    CHECK(roughness_factor(0, f, sigma) == 1);
    CHECK(roughness_factor(0.5, 1e5, sigma) == Approx(1).margin(1e-4));
    CHECK(roughness_factor(100, f, sigma) == Approx(2).margin(1e-3));
    CHECK(roughness_factor(depth_um, f, sigma) == Approx(1 + 2 / M_PI * std::atan(1.4)));
    Line line, rough;
    rough.roughness_um = 0.6;
    CHECK(matched_loss_db(rough, f) > 1.1 * matched_loss_db(line, f));
}

TEST_CASE("temperature and process scale the banks of a die alike on all its lanes") {
    auto json = small_json();
    json["process"] = {{"resistor_scale", 1.1}, {"capacitor_scale", 0.9}};
    json["temperature"] = {{"celsius", 85},
                           {"reference_celsius", 25},
                           {"resistor_ppm_per_k", -1000},
                           {"switch_ppm_per_k", 3000}};
    const TargetFile target = target_of(json);
    const Receiver at = receiver_at(target);
    const BankSpec& r1 = target.receiver.banks[bank_r1];
    const BankSpec& c1 = target.receiver.banks[bank_c1];
    // 60 K at -1000 ppm/K, as of unsalicided high-resistance polysilicon in the GF180MCU kit.
    CHECK(at.banks[bank_r1].unit == Approx(r1.unit * 1.1 * 0.94));
    CHECK(at.banks[bank_r1].switch_ohm == Approx(r1.switch_ohm * 1.18));
    CHECK(at.banks[bank_c1].fixed == Approx(c1.fixed * 0.9));
    CHECK(target.noise.temperature_k == Approx(358.15));
    CHECK(at.termination_ohm == target.receiver.termination_ohm);
}

TEST_CASE("dies differ by the sigma of the process and never beyond three") {
    auto json = small_json();
    json["process"] = {{"resistor_sigma", 0.07}};
    json["temperature"] = {{"celsius", 25}};
    double sum = 0, squares = 0, most = 0;
    const int dies = 2000;
    TargetFile target = target_of(json);
    for (int die = 0; die < dies; ++die) {
        target.seed = static_cast<std::uint64_t>(die);
        const double away =
            receiver_at(target).banks[bank_r2].unit / target.receiver.banks[bank_r2].unit - 1;
        sum += away;
        squares += away * away;
        most = std::max(most, std::abs(away));
    }
    CHECK(std::abs(sum / dies) < 4 * 0.07 / std::sqrt(dies));
    CHECK(std::sqrt(squares / dies) == Approx(0.07).epsilon(0.06));
    CHECK(most <= 0.21 + 1e-12);
}

TEST_CASE("each part of the link can be left out and each one matters") {
    const nlohmann::json whole = small_json();
    const double all = score_of(whole);
    for (const char* part : {"package", "stub", "crosstalk", "compression"}) {
        auto json = whole;
        json.erase(part);
        INFO(part);
        CHECK(score_of(json) != all);
    }
    auto json = whole;
    json["transmitter"]["swing_mv"] = 800;
    CHECK(score_of(json) < all);
    json = whole;
    json["crosstalk"] = {{{"kind", "near_end"}, {"coupling_db", -28}}};
    CHECK(score_of(json) < all);
    json = whole;
    json["transmitter"].erase("bandwidth_ghz");
    CHECK(score_of(json) != all);
    json = whole;
    json["lanes"][3]["swing_mv"] = 1200;
    CHECK(score_of(json) > all);
}

TEST_CASE("small capacitors may have an error of their own, so that carries step backwards") {
    BankSpec bank{BankKind::capacitor, 3, 3e-15, 4e-15, 120, 0, 0, 0.0};
    bank.small_below = 10e-15;
    bank.small_error_sigma = 0.1;
    int backwards = 0;
    for (std::uint64_t seed = 0; seed < 400; ++seed) {
        const std::vector<double> factor = element_factors(bank, seed, 0, 3);
        CHECK(factor[3] == 1);  // 16 fF
        CHECK(factor[1] != 1);  // 4 fF
        bank.error_sigma = 0.2;
        const std::vector<double> rough = element_factors(bank, seed, 0, 3);
        bank.error_sigma = 0;
        // From code 3 to code 4: elements 1 and 2 off, element 3 on.
        if (4 * rough[3] < rough[1] + 2 * rough[2]) ++backwards;
    }
    CHECK(backwards > 20);
    CHECK(backwards < 200);
}
