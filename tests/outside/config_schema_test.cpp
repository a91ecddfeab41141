// The published schemas and our own decoders must agree on the corpus. The schemas are read by
// python3-jsonschema, an implementation of JSON Schema 2020-12 that shares nothing with ours.
#include <algorithm>
#include <array>
#include <catch2/catch.hpp>
#include <cstdio>
#include <filesystem>
#include <functional>
#include <map>
#include <memory>
#include <string>
#include <vector>

#include "daemon/engine/recipe.hpp"
#include "daemon/replay/columns.hpp"
#include "drivers/config/board_file.hpp"
#include "sim_target/target_file.hpp"

using namespace lanewright;

namespace {

const std::string source_dir = LANEWRIGHT_SOURCE_DIR;

std::vector<std::string> json_files(const std::string& folder) {
    std::vector<std::string> files;
    if (!std::filesystem::exists(folder)) return files;
    for (const auto& entry : std::filesystem::directory_iterator(folder)) {
        if (entry.path().extension() == ".json") files.push_back(entry.path().string());
    }
    std::sort(files.begin(), files.end());
    return files;
}

std::string output_of(const std::string& command) {
    struct Close {
        void operator()(FILE* pipe) const { pclose(pipe); }
    };
    const std::unique_ptr<FILE, Close> pipe(popen(command.c_str(), "r"));
    REQUIRE(pipe);
    std::string out;
    std::array<char, 4096> block{};
    std::size_t length = 0;
    while ((length = fread(block.data(), 1, block.size(), pipe.get())) > 0)
        out.append(block.data(), length);
    return out;
}

// What the schema says of each file: a line that begins with "accepts" or "refuses".
std::map<std::string, std::string> schema_verdicts(const std::string& schema,
                                                   const std::vector<std::string>& files) {
    std::string command = "/usr/bin/python3 '" + source_dir + "/tests/outside/check_schema.py' '" +
                          source_dir + "/configs/schema/" + schema + "'";
    for (const std::string& file : files) command += " '" + file + "'";
    const std::string out = output_of(command + " 2>&1");
    std::map<std::string, std::string> verdicts;
    std::size_t start = 0;
    while (start < out.size()) {
        const std::size_t end = std::min(out.find('\n', start), out.size());
        const std::string line = out.substr(start, end - start);
        for (const std::string& file : files) {
            if (line == "accepts " + file || line.starts_with("refuses " + file + ": "))
                verdicts[file] = line;
        }
        start = end + 1;
    }
    INFO(out);
    REQUIRE(verdicts.size() == files.size());
    return verdicts;
}

// Empty: accepted.
using Decoder = std::function<std::string(const std::string& path)>;

void compare(const std::string& kind, const std::string& schema, const Decoder& decoder) {
    struct Group {
        std::string folder;
        bool schema_accepts, decoder_accepts;
    };
    const std::string corpus = source_dir + "/tests/corpus/" + kind;
    for (const Group& group :
         {Group{source_dir + "/configs/" + kind, true, true}, Group{corpus + "/good", true, true},
          Group{corpus + "/bad", false, false}, Group{corpus + "/beyond_schema", true, false}}) {
        const auto files = json_files(group.folder);
        if (files.empty()) continue;
        const auto verdicts = schema_verdicts(schema, files);
        for (const std::string& file : files) {
            const std::string complaints = decoder(file);
            INFO(verdicts.at(file));
            INFO(complaints);
            CHECK(verdicts.at(file).starts_with("accepts") == group.schema_accepts);
            CHECK(complaints.empty() == group.decoder_accepts);
        }
    }
}

}  // namespace

TEST_CASE("schema and decoder agree on the corpus of board files") {
    REQUIRE(json_files(source_dir + "/tests/corpus/boards/bad").size() >= 8);
    compare("boards", "board.schema.json", [](const std::string& path) {
        Complaints complaints;
        static_cast<void>(load_board_file(path, complaints));
        return complaints.text();
    });
}

TEST_CASE("schema and decoder agree on the corpus of recipes") {
    REQUIRE(json_files(source_dir + "/tests/corpus/recipes/bad").size() >= 8);
    compare("recipes", "recipe.schema.json", [](const std::string& path) {
        Complaints complaints;
        static_cast<void>(load_recipe(path, complaints));
        return complaints.text();
    });
}

TEST_CASE("schema and decoder agree on the corpus of column maps") {
    REQUIRE(json_files(source_dir + "/tests/corpus/columns/bad").size() >= 8);
    compare("columns", "columns.schema.json", [](const std::string& path) {
        Complaints complaints;
        static_cast<void>(load_columns(path, complaints));
        return complaints.text();
    });
}

TEST_CASE("schema and decoder agree on the corpus of simulated targets") {
    REQUIRE(json_files(source_dir + "/tests/corpus/targets/bad").size() >= 4);
    compare("targets", "target.schema.json", [](const std::string& path) {
        Complaints complaints;
        static_cast<void>(sim::load_target(path, complaints));
        return complaints.text();
    });
}
