#pragma once
// Purpose:   all that fixes a run before its first write: what, on which board, from which files,
//            with which program, by whom. Stored whole; decisions may depend on it and on readings.
// Ownership: values only.
// Threads:   no shared state.

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "daemon/store/events.hpp"

namespace lanewright {

struct SourceFile {
    std::string path;    // as given
    std::string sha256;  // of the text
    std::string text;    // whole
};

// Of a run whose readings were logged by other means: what they were made from. Such a run has no
// board to go back to.
struct Import {
    SourceFile columns;                          // the column map, whole
    std::string readings_path, readings_sha256;  // the file of margins, as given
    std::uint64_t row_count = 0, rejected_count = 0;
    std::string pattern;  // "unknown" where nobody can say
    bool condition_known = false, error_ratio_known = false;
};

// What a run was for.
enum class Purpose : std::uint8_t {
    tune,
    preflight  // `check --measure`: nothing is searched, the codes are put back
};

struct Manifest {
    RunId run;
    std::int64_t started_ns = 0;  // UTC since the epoch
    std::string zone;             // offset of local time, +02:00
    std::string version, git_hash, build, cpu, host;
    std::int64_t pid = 0;
    SourceFile board_file, recipe_file;
    std::string board, recipe;  // their names
    std::string link;           // tcp:HOST:PORT or serial:PATH
    Identity identity;
    std::vector<std::uint16_t> lanes;               // in ascending order
    std::vector<std::vector<std::uint16_t>> waves;  // lanes that run together, in order
    std::uint64_t seed = 0;
    std::map<std::string, std::string> tags;
    std::string condition;  // empty: as found
    Purpose purpose = Purpose::tune;
    std::optional<Import> imported;
};

// UTC now and the local offset, for the manifest and for stamps.
std::int64_t utc_now_ns();
std::string local_zone_offset();

// 2026-12-01T15:04:05.678+00:00, in the offset given.
std::string iso8601(std::int64_t utc_ns, const std::string& zone);

// A new run id: 20261201T150405-1f2e3d4c, UTC seconds and 32 random bits.
RunId new_run_id(std::int64_t utc_ns);

std::string sha256_hex(const std::string& text);

std::string encode_manifest(const Manifest& manifest);
Manifest decode_manifest(const std::string& text);  // throws StoreError

}  // namespace lanewright
