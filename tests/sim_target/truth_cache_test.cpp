#include "sim_target/truth_cache.hpp"

#include <unistd.h>

#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>
#include <iterator>

#include "tests/sim_target/physics_support.hpp"

using namespace lanewright::sim;

namespace {

class Folder {
  public:
    Folder()
        : path_(std::filesystem::temp_directory_path() /
                ("lanewright-truth-" + std::to_string(::getpid()))) {
        std::filesystem::remove_all(path_);
    }
    ~Folder() {
        std::error_code ignored;
        std::filesystem::remove_all(path_, ignored);
    }
    std::string text() const { return path_.string(); }
    std::size_t files() const {
        if (!std::filesystem::exists(path_)) return 0;
        return static_cast<std::size_t>(
            std::distance(std::filesystem::directory_iterator(path_), {}));
    }
    std::filesystem::path only_file() const {
        return std::filesystem::directory_iterator(path_)->path();
    }

  private:
    std::filesystem::path path_;
};

nlohmann::json tiny_json() {
    nlohmann::json json = small_json();
    for (const char* bank : {"r1", "c1", "r2"}) json["receiver"]["banks"][bank]["bits"] = 2;
    json["reset_codes"] = {{"r1", 0}, {"c1", 0}, {"r2", 0}, {"c2", 0}};
    return json;
}

}  // namespace

TEST_CASE("best codes are kept and found again, and a broken file is never believed") {
    const Folder folder;
    const TargetFile target = target_of(tiny_json());
    const Oracle oracle(target, 2);
    const auto asked = [&] {
        return kept_best_codes(oracle, target, target.required, 1, folder.text());
    };
    const CodesScore fresh = asked();
    REQUIRE(folder.files() == 1);
    CHECK(asked().codes == fresh.codes);
    CHECK(asked().score == fresh.score);

    nlohmann::json kept;
    std::ifstream(folder.only_file()) >> kept;
    const auto put = [&](const std::string& text) { std::ofstream(folder.only_file()) << text; };
    auto altered = kept;
    altered["codes"][0] = (fresh.codes[0] + 1) % 4;
    auto outside = kept;
    outside["codes"][1] = 99;
    auto other = kept;
    other["question"] = "another";
    for (const std::string& broken :
         {std::string(), std::string("{"), kept.dump().substr(0, 40), altered.dump(),
          outside.dump(), other.dump(), std::string("[1,2]"),
          std::string(R"({"question":5,"codes":"x","score":null})")}) {
        put(broken);
        INFO(broken.substr(0, 60));
        CHECK(asked().codes == fresh.codes);
        CHECK(asked().score == fresh.score);
    }
}

TEST_CASE("another lane, requirement, target or board is another question") {
    const TargetFile target = target_of(tiny_json());
    const std::string question = truth_question(target, 1, target.required);
    CHECK(truth_question(target, 1, target.required) == question);
    CHECK(truth_question(target, 2, target.required) != question);
    Required harder = target.required;
    harder.error_ratio = 1e-9;
    CHECK(truth_question(target, 1, harder) != question);
    TargetFile board = target;
    board.board = 3;
    CHECK(truth_question(board, 1, target.required) != question);
    auto json = tiny_json();
    json["seed"] = 77;
    CHECK(truth_question(target_of(json), 1, target.required) != question);
}

TEST_CASE("a folder that cannot be written keeps nothing and does no harm") {
    const TargetFile target = target_of(tiny_json());
    const Oracle oracle(target, 0);
    const CodesScore best = best_codes(oracle, target.required, 1);
    for (const char* folder : {"", "/proc/none/of/these"})
        CHECK(kept_best_codes(oracle, target, target.required, 1, folder).score == best.score);
}
