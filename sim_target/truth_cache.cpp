#include "sim_target/truth_cache.hpp"

#include <unistd.h>

#include <array>
#include <cmath>
#include <cstdint>
#include <cstdio>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <nlohmann/json.hpp>
#include <optional>
#include <sstream>
#include <system_error>

namespace lanewright::sim {

namespace {

// To be raised with every change of the physics or of the search for the best codes.
constexpr int physics_version = 2;

// FNV-1a, 64 bits (Fowler, Noll, Vo): names files and tells channel files apart. The question is
// compared in full, so two questions with one name only take each other's place.
std::uint64_t fingerprint(const std::string& text) {
    std::uint64_t hash = 0xCBF29CE484222325;
    for (const char letter : text) {
        hash ^= static_cast<unsigned char>(letter);
        hash *= 0x100000001B3;
    }
    return hash;
}

std::string in_hex(std::uint64_t value) {
    std::array<char, 20> text{};
    std::snprintf(text.data(), text.size(), "%016llx", static_cast<unsigned long long>(value));
    return text.data();
}

std::optional<std::string> contents(const std::filesystem::path& path) {
    std::ifstream file(path, std::ios::binary);
    if (!file) return std::nullopt;
    std::ostringstream text;
    text << file.rdbuf();
    return std::move(text).str();
}

std::optional<CodesScore> believed(const std::string& text, const std::string& question,
                                   const Oracle& oracle, const Required& required) {
    const auto json = nlohmann::json::parse(text, nullptr, false);
    if (!json.is_object() || !json.contains("question")) return std::nullopt;
    if (!json["question"].is_string() || json["question"] != question) return std::nullopt;
    if (!json.contains("score") || !json["score"].is_number()) return std::nullopt;
    if (!json.contains("codes") || !json["codes"].is_array()) return std::nullopt;
    const std::vector<int> counts = oracle.code_counts();
    if (json["codes"].size() != counts.size()) return std::nullopt;
    CodesScore kept;
    for (std::size_t i = 0; i < counts.size(); ++i) {
        const auto& code = json["codes"][i];
        if (!code.is_number_integer()) return std::nullopt;
        const auto value = code.get<std::int64_t>();
        if (value < 0 || value >= counts[i]) return std::nullopt;
        kept.codes.push_back(static_cast<int>(value));
    }
    kept.margins = oracle.margins(kept.codes, required.error_ratio);
    kept.score = score(kept.margins, required);
    const double stated = json["score"].get<double>();
    if (!(std::abs(kept.score - stated) <= 1e-9 * std::abs(stated) + 1e-12)) return std::nullopt;
    return kept;
}

// Written beside its place and moved there: no reader sees half of it.
void keep(const std::filesystem::path& path, const std::string& text) {
    std::error_code failed;
    std::filesystem::create_directories(path.parent_path(), failed);
    const std::filesystem::path draft = path.string() + "." + std::to_string(::getpid());
    {
        std::ofstream file(draft, std::ios::binary);
        file << text;
        file.close();
        if (file) std::filesystem::rename(draft, path, failed);
    }
    std::filesystem::remove(draft, failed);
}

}  // namespace

std::string default_truth_folder() {
    const auto variable = [](const char* name) {
        const char* value = std::getenv(name);
        return std::string(value == nullptr ? "" : value);
    };
    const std::string cache = variable("XDG_CACHE_HOME");
    // The XDG base directory specification: a relative path counts as none.
    if (cache.starts_with('/')) return cache + "/lanewright/truth";
    const std::string home = variable("HOME");
    return home.empty() ? std::string() : home + "/.cache/lanewright/truth";
}

std::string truth_question(const TargetFile& target, int lane, const Required& required) {
    std::array<char, 200> numbers{};
    std::snprintf(numbers.data(), numbers.size(),
                  "physics %d, seed %llu, board %d, lane %d, height_mv %.17g, width_ui %.17g, "
                  "error_ratio %.17g",
                  physics_version, static_cast<unsigned long long>(target.seed), target.board, lane,
                  required.height_mv, required.width_ui, required.error_ratio);
    std::string question = numbers.data();
    const auto& file = target.lanes.at(static_cast<std::size_t>(lane)).touchstone;
    if (file) {
        const std::string text = contents(file->path).value_or("");
        question += ", channel file of " + std::to_string(text.size()) + " bytes " +
                    in_hex(fingerprint(text));
    }
    return question + "\n" + target.source;
}

CodesScore kept_best_codes(const Oracle& oracle, const TargetFile& target, const Required& required,
                           unsigned threads, const std::string& folder) {
    if (folder.empty() || target.source.empty()) return best_codes(oracle, required, threads);
    const std::string question = truth_question(target, oracle.lane(), required);
    const std::filesystem::path path =
        std::filesystem::path(folder) / (in_hex(fingerprint(question)) + ".json");
    if (const auto text = contents(path))
        if (const auto kept = believed(*text, question, oracle, required)) return *kept;
    CodesScore best = best_codes(oracle, required, threads);
    keep(
        path,
        nlohmann::ordered_json{{"codes", best.codes}, {"score", best.score}, {"question", question}}
                .dump() +
            "\n");
    return best;
}

}  // namespace lanewright::sim
