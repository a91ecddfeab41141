#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>
#include <random>
#include <sstream>

#include "dialect_desk.hpp"
#include "fuzz_framed.hpp"

using namespace lanewright::test;

namespace {

// Hex digits, any white space, and lines that begin with #.
Octets read_hex(const std::filesystem::path& path) {
    std::ifstream file(path);
    std::string line, digits;
    while (std::getline(file, line)) {
        if (!line.starts_with('#')) digits += line;
        digits += ' ';
    }
    Octets out;
    std::istringstream words(digits);
    for (std::string word; words >> word;) {
        out.push_back(static_cast<std::uint8_t>(std::stoul(word, nullptr, 16)));
    }
    return out;
}

std::vector<Octets> corpus() {
    std::vector<Octets> out;
    const std::filesystem::path folder =
        std::string(LANEWRIGHT_SOURCE_DIR) + "/tests/corpus/framed";
    for (const auto& entry : std::filesystem::directory_iterator(folder)) {
        if (entry.path().extension() == ".hex") out.push_back(read_hex(entry.path()));
    }
    return out;
}

}  // namespace

TEST_CASE("the framed dialect keeps its promises on every script of the corpus") {
    const std::vector<Octets> scripts = corpus();
    REQUIRE(scripts.size() >= 8);
    for (const Octets& script : scripts) {
        REQUIRE(!script.empty());
        CHECK_NOTHROW(fuzz_framed(script));
    }
}

TEST_CASE("the framed dialect keeps its promises on 20,000 altered scripts") {
    const std::vector<Octets> scripts = corpus();
    std::mt19937 random(20012);
    for (int i = 0; i < 20000; ++i) {
        Octets script = scripts[random() % scripts.size()];
        const Octets& other = scripts[random() % scripts.size()];
        script.insert(script.end(), other.begin(), other.end());
        const unsigned changes = random() % 6;
        for (unsigned k = 0; k < changes; ++k) {
            const std::size_t at = random() % script.size();
            if (random() % 3 == 0) {
                script.erase(script.begin() + static_cast<std::ptrdiff_t>(at));
                if (script.empty()) script.push_back(0);
            } else {
                script[at] = static_cast<std::uint8_t>(random() % 3 == 0 ? random() : random() % 9);
            }
        }
        INFO("alteration " << i << " of seed 20012");
        REQUIRE_NOTHROW(fuzz_framed(script));
    }
}

TEST_CASE("the framed dialect keeps its promises on 20,000 random scripts") {
    std::mt19937 random(20013);
    for (int i = 0; i < 20000; ++i) {
        Octets script;
        const unsigned steps = 1 + random() % 30;
        for (unsigned k = 0; k < steps; ++k) {
            script.push_back(static_cast<std::uint8_t>(random() % 9));
            const unsigned length = random() % 5;
            script.push_back(static_cast<std::uint8_t>(length));
            for (unsigned n = 0; n < length; ++n) {
                script.push_back(static_cast<std::uint8_t>(random() % (n == 0 ? 8 : 256)));
            }
        }
        INFO("script " << i << " of seed 20013");
        REQUIRE_NOTHROW(fuzz_framed(script));
    }
}
