#include "daemon/store/manifest.hpp"

#include <openssl/evp.h>

#include <array>
#include <chrono>
#include <cstdio>
#include <ctime>
#include <nlohmann/json.hpp>
#include <random>

#include "daemon/store/store_error.hpp"
#include "daemon/store/value_json.hpp"

namespace lanewright {

using nlohmann::json;

namespace {

std::string hex(std::uint32_t value) {
    char text[16];
    std::snprintf(text, sizeof text, "%08x", value);
    return text;
}

std::tm utc_parts(std::int64_t utc_ns, int offset_minutes) {
    const std::time_t seconds = utc_ns / 1'000'000'000 + offset_minutes * 60;
    std::tm parts{};
    gmtime_r(&seconds, &parts);
    return parts;
}

int minutes_of(const std::string& zone) {
    int hours = 0, minutes = 0;
    char sign = '+';
    if (std::sscanf(zone.c_str(), "%c%2d:%2d", &sign, &hours, &minutes) != 3) return 0;
    return (sign == '-' ? -1 : 1) * (hours * 60 + minutes);
}

json file_json(const SourceFile& file) {
    return {{"path", file.path}, {"sha256", file.sha256}, {"text", file.text}};
}

SourceFile file_from(const json& value) {
    return {value.at("path").get<std::string>(), value.at("sha256").get<std::string>(),
            value.at("text").get<std::string>()};
}

json import_json(const Import& import) {
    return {{"columns", file_json(import.columns)},
            {"readings_path", import.readings_path},
            {"readings_sha256", import.readings_sha256},
            {"row_count", import.row_count},
            {"rejected_count", import.rejected_count},
            {"pattern", import.pattern},
            {"condition_known", import.condition_known},
            {"error_ratio_known", import.error_ratio_known}};
}

Import import_from(const json& value) {
    Import out;
    out.columns = file_from(value.at("columns"));
    value.at("readings_path").get_to(out.readings_path);
    value.at("readings_sha256").get_to(out.readings_sha256);
    value.at("row_count").get_to(out.row_count);
    value.at("rejected_count").get_to(out.rejected_count);
    value.at("pattern").get_to(out.pattern);
    value.at("condition_known").get_to(out.condition_known);
    value.at("error_ratio_known").get_to(out.error_ratio_known);
    return out;
}

}  // namespace

std::int64_t utc_now_ns() {
    return std::chrono::duration_cast<std::chrono::nanoseconds>(
               std::chrono::system_clock::now().time_since_epoch())
        .count();
}

std::string local_zone_offset() {
    const std::time_t now = std::time(nullptr);
    std::tm parts{};
    localtime_r(&now, &parts);
    const long minutes = parts.tm_gmtoff / 60;
    char text[32];
    std::snprintf(text, sizeof text, "%c%02ld:%02ld", minutes < 0 ? '-' : '+',
                  std::labs(minutes) / 60, std::labs(minutes) % 60);
    return text;
}

std::string iso8601(std::int64_t utc_ns, const std::string& zone) {
    const std::tm parts = utc_parts(utc_ns, minutes_of(zone));
    char text[64];
    const std::size_t used = std::strftime(text, sizeof text, "%Y-%m-%dT%H:%M:%S", &parts);
    const auto milliseconds = static_cast<int>(utc_ns / 1'000'000 % 1000);
    std::snprintf(text + used, sizeof text - used, ".%03d%s", milliseconds,
                  zone.empty() ? "+00:00" : zone.c_str());
    return text;
}

RunId new_run_id(std::int64_t utc_ns) {
    const std::tm parts = utc_parts(utc_ns, 0);
    char text[32];
    std::strftime(text, sizeof text, "%Y%m%dT%H%M%S", &parts);
    std::random_device device;
    return std::string(text) + "-" + hex(device());
}

std::string sha256_hex(const std::string& text) {
    std::array<unsigned char, EVP_MAX_MD_SIZE> digest{};
    unsigned int size = 0;
    if (EVP_Digest(text.data(), text.size(), digest.data(), &size, EVP_sha256(), nullptr) != 1) {
        throw StoreError("SHA-256 is not available in this libcrypto");
    }
    std::string out;
    for (unsigned int i = 0; i < size; ++i) {
        char byte[3];
        std::snprintf(byte, sizeof byte, "%02x", digest[i]);
        out += byte;
    }
    return out;
}

std::string encode_manifest(const Manifest& m) {
    json out{{"run", m.run},
             {"started_ns", m.started_ns},
             {"zone", m.zone},
             {"version", m.version},
             {"git_hash", m.git_hash},
             {"build", m.build},
             {"cpu", m.cpu},
             {"host", m.host},
             {"pid", m.pid},
             {"board_file", file_json(m.board_file)},
             {"recipe_file", file_json(m.recipe_file)},
             {"board", m.board},
             {"recipe", m.recipe},
             {"link", m.link},
             {"identity", to_json_value(m.identity)},
             {"lanes", m.lanes},
             {"waves", m.waves},
             {"seed", m.seed},
             {"tags", m.tags},
             {"condition", m.condition}};
    if (m.purpose == Purpose::preflight) out["purpose"] = "preflight";
    if (m.imported) out["imported"] = import_json(*m.imported);
    return out.dump(-1, ' ', false, json::error_handler_t::replace);
}

Manifest decode_manifest(const std::string& text) {
    try {
        const json value = json::parse(text);
        Manifest m;
        value.at("run").get_to(m.run);
        value.at("started_ns").get_to(m.started_ns);
        value.at("zone").get_to(m.zone);
        value.at("version").get_to(m.version);
        value.at("git_hash").get_to(m.git_hash);
        value.at("build").get_to(m.build);
        value.at("cpu").get_to(m.cpu);
        value.at("host").get_to(m.host);
        value.at("pid").get_to(m.pid);
        m.board_file = file_from(value.at("board_file"));
        m.recipe_file = file_from(value.at("recipe_file"));
        value.at("board").get_to(m.board);
        value.at("recipe").get_to(m.recipe);
        value.at("link").get_to(m.link);
        m.identity = identity_from(value.at("identity"));
        value.at("lanes").get_to(m.lanes);
        value.at("waves").get_to(m.waves);
        value.at("seed").get_to(m.seed);
        value.at("tags").get_to(m.tags);
        value.at("condition").get_to(m.condition);
        if (value.value("purpose", "tune") == "preflight") m.purpose = Purpose::preflight;
        if (value.contains("imported")) m.imported = import_from(value.at("imported"));
        return m;
    } catch (const json::exception& error) {
        throw BadStoreData(std::string("a run's manifest cannot be read: ") + error.what());
    }
}

}  // namespace lanewright
