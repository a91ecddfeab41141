#include <algorithm>
#include <catch2/catch.hpp>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <sstream>
#include <string>
#include <vector>

#include "drivers/config/board_file.hpp"

using namespace lanewright;

namespace {

const std::filesystem::path corpus = std::filesystem::path(LANEWRIGHT_SOURCE_DIR) / "tests/corpus";

std::vector<std::filesystem::path> json_files(const std::filesystem::path& folder) {
    std::vector<std::filesystem::path> files;
    for (const auto& entry : std::filesystem::directory_iterator(folder)) {
        if (entry.path().extension() == ".json") files.push_back(entry.path());
    }
    std::sort(files.begin(), files.end());
    return files;
}

std::string text_of_file(const std::filesystem::path& path) {
    std::ostringstream text;
    text << std::ifstream(path, std::ios::binary).rdbuf();
    return text.str();
}

// All complaints about a board file, its folder left out.
std::string complaints_of(const std::filesystem::path& path, bool& accepted) {
    Complaints complaints;
    const auto document = Document::parse(text_of_file(path), path.filename().string(), complaints);
    accepted = document && decode_board_file(*document, complaints);
    return complaints.text();
}

bool rewriting() {
    const char* asked = std::getenv("LANEWRIGHT_GOLDEN");
    return asked != nullptr && std::string(asked) == "rewrite";
}

}  // namespace

TEST_CASE("every good board file of the corpus is accepted without complaint") {
    const auto files = json_files(corpus / "boards/good");
    REQUIRE(files.size() >= 3);
    for (const auto& path : files) {
        bool accepted = false;
        INFO(path.string());
        CHECK(complaints_of(path, accepted).empty());
        CHECK(accepted);
    }
}

TEST_CASE("every bad board file of the corpus gets the complaints written beside it", "[golden]") {
    for (const char* group : {"boards/bad", "boards/beyond_schema"}) {
        const auto files = json_files(corpus / group);
        REQUIRE(files.size() >= 8);
        for (auto path : files) {
            bool accepted = true;
            INFO(path.string());
            const std::string said = complaints_of(path, accepted);
            CHECK_FALSE(accepted);
            path.replace_extension(".txt");
            if (rewriting()) std::ofstream(path, std::ios::binary) << said;
            CHECK(said == text_of_file(path));
        }
    }
}

TEST_CASE("a board file cut off or with one byte changed anywhere never crashes the decoder") {
    const std::string whole = text_of_file(corpus / "boards/good/height_and_width.json");
    REQUIRE(whole.size() > 1000);
    for (std::size_t at = 0; at < whole.size(); at += 3) {
        Complaints cut_complaints;
        // A document that is still JSON after the cut would be a parser that stops early; only
        // white space may be missing.
        const auto cut = Document::parse(whole.substr(0, at), "cut.json", cut_complaints);
        if (at + 2 < whole.size()) CHECK_FALSE(cut);

        for (const char wrong : {'\0', '"', '{', '9', '\xFF'}) {
            std::string changed = whole;
            changed[at] = wrong;
            Complaints complaints;
            const auto document = Document::parse(changed, "changed.json", complaints);
            const bool accepted = document && decode_board_file(*document, complaints);
            // Accepted or complained of, never neither and never both.
            CHECK(accepted != complaints.any());
        }
    }
}
