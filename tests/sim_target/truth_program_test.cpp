// The program's `truth` verb from the outside: output, exit codes, and what it says about mistakes.

#include <sys/wait.h>
#include <unistd.h>

#include <array>
#include <catch2/catch.hpp>
#include <cstdio>
#include <filesystem>
#include <fstream>
#include <nlohmann/json.hpp>
#include <string>

using Catch::Matchers::Contains;

namespace {

struct Ran {
    int code = -1;
    std::string out;
};

// Both streams together unless `only_stdout`.
Ran run(const std::string& arguments, bool only_stdout = false) {
    const std::string command = std::string("'") + LANEWRIGHT_TARGET_PROGRAM + "' " + arguments +
                                (only_stdout ? " 2>/dev/null" : " 2>&1");
    Ran ran;
    FILE* pipe = popen(command.c_str(), "r");
    REQUIRE(pipe != nullptr);
    std::array<char, 4096> buffer{};
    while (const std::size_t got = fread(buffer.data(), 1, buffer.size(), pipe))
        ran.out.append(buffer.data(), got);
    const int status = pclose(pipe);
    ran.code = WIFEXITED(status) ? WEXITSTATUS(status) : -1;
    return ran;
}

const std::string demo = " --target '" LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json'";
const std::string codes = " --codes r1=9,r2=15,c1=15,c2=0";

}  // namespace

TEST_CASE("the truth of given codes is one JSON object on stdout") {
    const Ran ran = run("truth" + demo + " --lane 3" + codes +
                            " --required height_mv=40,width_ui=0.3,error_ratio=1e-9 --json",
                        true);
    REQUIRE(ran.code == 0);
    const auto json = nlohmann::json::parse(ran.out);
    CHECK(json["required"]["error_ratio"] == 1e-9);
    const auto& result = json["results"][0];
    CHECK(result["codes"] == nlohmann::json{{"r1", 9}, {"r2", 15}, {"c1", 15}, {"c2", 0}});
    const double up = result["up_mv"], down = result["down_mv"];
    const double left = result["left_ui"], right = result["right_ui"];
    CHECK(result["score"].get<double>() ==
          Approx(std::min(2 * std::min(up, down) / 40, 2 * std::min(left, right) / 0.3)));
}

TEST_CASE("misuse of the program ends with 64 and says how to go on") {
    CHECK(run("").code == 64);
    const Ran verb = run("trooth" + demo);
    CHECK(verb.code == 64);
    CHECK_THAT(verb.out, Contains("did you mean 'truth'"));
    CHECK(run("truth --lane 0 --best").code == 64);
    CHECK(run("truth" + demo + " --lane 0").code == 64);
    CHECK(run("truth" + demo + " --lane 0 --best --all").code == 64);
    CHECK(run("truth" + demo + " --lane 8" + codes).code == 64);
    CHECK(run("truth" + demo + " --lane -1" + codes).code == 64);
    CHECK(run("truth" + demo + " --lane 0 --codes r1=9").code == 64);
    CHECK(run("truth" + demo + " --lane 0 --required height=1" + codes).code == 64);
    CHECK(run("truth" + demo + " --lane 0 --json --csv" + codes).code == 64);
    CHECK(run("--help").code == 0);
}

TEST_CASE("a target file that is wrong ends with 78, bad channel data with 65") {
    const Ran missing = run("truth --target /nonexistent.json --lane 0 --json" + codes, true);
    CHECK(missing.code == 78);
    CHECK_THAT(nlohmann::json::parse(missing.out)["error"].get<std::string>(),
               Contains("/nonexistent.json"));

    std::ifstream file(LANEWRIGHT_SOURCE_DIR "/configs/targets/demo.json");
    auto json = nlohmann::json::parse(file);
    for (const char* key : {"board", "binding", "wire", "faults"}) json.erase(key);
    const std::filesystem::path folder =
        std::filesystem::temp_directory_path() / ("lanewright-truth-" + std::to_string(::getpid()));
    std::filesystem::create_directories(folder);
    std::ofstream(folder / "bad.s4p") << "# GHz S RI R 50\n1 2 3\n";
    json["lanes"][0] = {{"touchstone", {{"file", "bad.s4p"}}}};
    std::ofstream(folder / "target.json") << json.dump();
    const Ran data =
        run("truth --target '" + (folder / "target.json").string() + "' --lane 0" + codes);
    CHECK(data.code == 65);
    CHECK_THAT(data.out, Contains("bad.s4p:2"));
    std::filesystem::remove_all(folder);
}
