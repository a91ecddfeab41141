// Outside check of the equalizer's response: the same networks in ngspice, run here.
// Tolerances: AC 1e-6 dB, step 1e-4 of the input step.

#include <stdlib.h>

#include <catch2/catch.hpp>
#include <cmath>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <sstream>
#include <string>
#include <vector>

#include "adapt/search/response.hpp"
#include "adapt/stats/random.hpp"

using namespace lanewright;

namespace {

class ScratchFolder {
  public:
    ScratchFolder() {
        std::string name =
            (std::filesystem::temp_directory_path() / "lanewright-ngspice-XXXXXX").string();
        REQUIRE(mkdtemp(name.data()) != nullptr);
        path_ = name;
    }
    ~ScratchFolder() {
        std::error_code ignored;
        std::filesystem::remove_all(path_, ignored);
    }
    ScratchFolder(const ScratchFolder&) = delete;
    ScratchFolder& operator=(const ScratchFolder&) = delete;
    const std::filesystem::path& path() const { return path_; }

  private:
    std::filesystem::path path_;
};

// The netlist: one branch an element, each with its switch resistance where it has one.
std::string netlist(const Network& network, const Surroundings& around, const std::string& source,
                    const std::string& commands) {
    std::ostringstream text;
    text.precision(17);
    text << "equalizer\nV1 src 0 " << source << '\n';
    const auto branch = [&](const char* name, const char* from, const char* to, char kind,
                            double value, double on_ohm) {
        const std::string middle = on_ohm > 0 ? std::string("m") + name : to;
        text << kind << name << ' ' << from << ' ' << middle << ' ' << value << '\n';
        if (on_ohm > 0) text << "RS" << name << ' ' << middle << ' ' << to << ' ' << on_ohm << '\n';
    };
    const char* input = "src";
    if (around.source_ohm > 0) {
        text << "RSRC src a " << around.source_ohm << '\n';
        input = "a";
    }
    branch("R1", input, "out", 'R', network.r1_ohm, around.on_r1_ohm);
    branch("C1", input, "out", 'C', network.c1_farad, around.on_c1_ohm);
    branch("R2", "out", "0", 'R', network.r2_ohm, around.on_r2_ohm);
    branch("C2", "out", "0", 'C', network.c2_farad, around.on_c2_ohm);
    if (around.load_farad > 0) text << "CL out 0 " << around.load_farad << '\n';
    if (around.load_siemens > 0) text << "RL out 0 " << 1 / around.load_siemens << '\n';
    text << ".control\nset numdgt=15\n"
         << commands << "\nwrdata result.txt v(out)\nquit\n.endc\n.end\n";
    return text.str();
}

// Rows of numbers that ngspice wrote; fails the test if it did not run.
std::vector<std::vector<double>> simulate(const std::string& text) {
    const ScratchFolder folder;
    std::ofstream(folder.path() / "net.cir") << text;
    const std::string command =
        "cd '" + folder.path().string() + "' && ngspice -b net.cir > log.txt 2>&1";
    const int outcome = std::system(command.c_str());
    std::ostringstream log;
    log << std::ifstream(folder.path() / "log.txt").rdbuf();
    INFO(log.str());
    std::ifstream file(folder.path() / "result.txt");
    INFO("ngspice ended with " << outcome);
    REQUIRE(file.is_open());
    std::vector<std::vector<double>> rows;
    for (std::string line; std::getline(file, line);) {
        std::istringstream numbers(line);
        std::vector<double> row;
        for (double number = 0; numbers >> number;) row.push_back(number);
        if (!row.empty()) rows.push_back(std::move(row));
    }
    return rows;
}

double spread(Random& random, double low, double high) {
    return low * std::pow(high / low, random.uniform());
}

Network random_network(Random& random) {
    return {spread(random, 100, 3000), spread(random, 10e-15, 500e-15), spread(random, 80, 1500),
            spread(random, 2e-15, 100e-15)};
}

void check_ac(const Network& network, const Surroundings& around) {
    const auto rows = simulate(netlist(network, around, "DC 0 AC 1", "ac dec 10 1e6 1e11"));
    REQUIRE(rows.size() >= 50);
    double worst_db = 0;
    for (const auto& row : rows) {
        REQUIRE(row.size() == 3);
        const std::complex<double> simulated(row[1], row[2]);
        const auto ours = transfer(network, around, row[0]).value();
        worst_db = std::max(worst_db, std::abs(20 * std::log10(std::abs(ours / simulated))));
        CHECK(std::abs(std::arg(ours / simulated)) < 1e-6);
    }
    CHECK(worst_db < 1e-6);
}

}  // namespace

TEST_CASE("the general response agrees with ngspice over frequency") {
    check_ac({400, 400e-15, 400, 50e-15}, {});
    check_ac({600, 250e-15, 200, 20e-15}, {25, 30e-15, 0, 0, 0, 0, 0});
    Random random({21, 0, 0, 0});
    for (int i = 0; i < 6; ++i) {
        check_ac(random_network(random),
                 {spread(random, 5, 60), spread(random, 1e-15, 80e-15),
                  1 / spread(random, 200, 1e5), spread(random, 2, 60), spread(random, 2, 60),
                  spread(random, 2, 60), spread(random, 2, 60)});
    }
}

TEST_CASE("the step response of the ideal network agrees with ngspice") {
    Random random({22, 0, 0, 0});
    for (const auto& network :
         {Network{400, 400e-15, 400, 50e-15}, random_network(random), random_network(random)}) {
        const auto rows =
            simulate(netlist(network, {}, "PWL(0 0 1e-15 1)", "tran 0.1p 600p 0 0.1p"));
        REQUIRE(rows.size() > 1000);
        double worst = 0;
        for (const auto& row : rows) {
            REQUIRE(row.size() == 2);
            if (row[0] < 1e-13) continue;  // the edge itself
            worst = std::max(worst, std::abs(row[1] - step_response(network, row[0]).value()));
        }
        CHECK(worst < 1e-4);
    }
}
