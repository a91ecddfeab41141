#include "daemon/engine/restore_note.hpp"

#include <fcntl.h>
#include <unistd.h>

#include <algorithm>
#include <cerrno>
#include <cstring>
#include <filesystem>
#include <fstream>
#include <nlohmann/json.hpp>
#include <sstream>

#include "daemon/store/store_error.hpp"
#include "daemon/store/value_json.hpp"

namespace lanewright {

namespace fs = std::filesystem;
using nlohmann::json;

namespace {

constexpr const char* note_format = "lanewright-restore/1";

Fault io_fault(const std::string& what, const std::string& path, const std::string& why) {
    Fault fault;
    fault.cause = Cause::io;
    fault.what = what + " " + path + ": " + why;
    return fault;
}

bool write_all(int descriptor, const std::string& text) {
    std::size_t done = 0;
    while (done < text.size()) {
        const ssize_t n = ::write(descriptor, text.data() + done, text.size() - done);
        if (n < 0 && errno == EINTR) continue;
        if (n <= 0) return false;
        done += static_cast<std::size_t>(n);
    }
    return true;
}

bool sync_folder(const std::string& path) {
    const int folder = ::open(fs::path(path).parent_path().c_str(), O_RDONLY | O_CLOEXEC);
    if (folder < 0) return false;
    const bool synced = ::fsync(folder) == 0;
    ::close(folder);
    return synced;
}

Result<void> replace_file(const std::string& path, const std::string& text) {
    const std::string beside = path + ".new";
    const int file = ::open(beside.c_str(), O_WRONLY | O_CREAT | O_TRUNC | O_CLOEXEC, 0644);
    if (file < 0)
        return io_fault("the restore note cannot be written", beside, std::strerror(errno));
    const bool written = write_all(file, text) && ::fsync(file) == 0;
    const int error = errno;
    ::close(file);
    if (!written)
        return io_fault("the restore note cannot be written", beside, std::strerror(error));
    if (::rename(beside.c_str(), path.c_str()) != 0 || !sync_folder(path)) {
        return io_fault("the restore note cannot be written", path, std::strerror(errno));
    }
    return {};
}

json encode(const RestoreNote& note) {
    json lanes = json::array();
    for (const SavedLane& lane : note.lanes) lanes.push_back(to_json_value(lane));
    return {{"format", note_format},    {"endpoint", note.endpoint},
            {"board", note.board},      {"identity", to_json_value(note.identity)},
            {"run", note.run},          {"store", note.store},
            {"lanes", std::move(lanes)}};
}

RestoreNote decode(const json& value) {
    if (value.at("format").get<std::string>() != note_format) {
        throw StoreError("it has another format than " + std::string(note_format));
    }
    RestoreNote note;
    value.at("endpoint").get_to(note.endpoint);
    value.at("board").get_to(note.board);
    note.identity = identity_from(value.at("identity"));
    value.at("run").get_to(note.run);
    value.at("store").get_to(note.store);
    for (const json& lane : value.at("lanes")) note.lanes.push_back(saved_lane_from(lane));
    return note;
}

}  // namespace

void RestoreNote::set(const SavedLane& lane) {
    for (SavedLane& entry : lanes) {
        if (entry.lane == lane.lane) {
            entry = lane;
            return;
        }
    }
    lanes.push_back(lane);
}

void RestoreNote::drop(Lane lane) {
    std::erase_if(lanes, [lane](const SavedLane& entry) { return entry.lane == lane; });
}

bool same_board(const Identity& one, const Identity& other) {
    return to_json_value(one) == to_json_value(other);
}

Result<void> write_note(const std::string& path, const RestoreNote& note) {
    std::error_code error;
    fs::create_directories(fs::path(path).parent_path(), error);
    if (error) return io_fault("the folder of the restore note", path, error.message());
    if (!note.lanes.empty()) return replace_file(path, encode(note).dump(2) + "\n");
    fs::remove(path, error);
    if (error || !sync_folder(path)) {
        return io_fault("the restore note cannot be removed", path, error.message());
    }
    return {};
}

Result<std::optional<RestoreNote>> read_note(const std::string& path) {
    std::ifstream in(path);
    if (!in) {
        if (!fs::exists(path)) return std::optional<RestoreNote>{};
        return io_fault("the restore note cannot be read", path, std::strerror(errno));
    }
    std::ostringstream text;
    text << in.rdbuf();
    try {
        return std::optional<RestoreNote>{decode(json::parse(text.str()))};
    } catch (const std::exception& problem) {
        Fault fault = io_fault("the restore note cannot be understood", path, problem.what());
        fault.hint =
            "It holds the codes that the board had; write them by hand, then move the file";
        return fault;
    }
}

}  // namespace lanewright
