#include "daemon/engine/endpoint.hpp"

#include <netdb.h>
#include <sys/socket.h>
#include <sys/stat.h>

#include <algorithm>
#include <cctype>
#include <cstdlib>
#include <filesystem>

#include "daemon/store/database.hpp"
#include "daemon/store/manifest.hpp"

namespace lanewright {

namespace fs = std::filesystem;

namespace {

std::string resolved_host(const std::string& host) {
    addrinfo wanted{};
    wanted.ai_socktype = SOCK_STREAM;
    addrinfo* found = nullptr;
    if (::getaddrinfo(host.c_str(), nullptr, &wanted, &found) != 0 || found == nullptr) return host;
    char text[NI_MAXHOST] = {};
    const int failed = ::getnameinfo(found->ai_addr, found->ai_addrlen, text, sizeof text, nullptr,
                                     0, NI_NUMERICHOST);
    ::freeaddrinfo(found);
    return failed != 0 ? host : text;
}

std::string by_id_of(const fs::path& device) {
    std::error_code error;
    for (const auto& entry : fs::directory_iterator("/dev/serial/by-id", error)) {
        if (fs::weakly_canonical(entry.path(), error) == device) return entry.path().string();
    }
    return {};
}

std::string serial_name(const std::string& path) {
    std::error_code error;
    const fs::path given = fs::absolute(path, error).lexically_normal();
    const fs::path device = fs::weakly_canonical(given, error);
    if (device.string().starts_with("/dev/pts/")) return given.string();
    const std::string by_id = by_id_of(device);
    return by_id.empty() ? device.string() : by_id;
}

// A file name that people recognise and that no two endpoints share.
std::string file_stem(const std::string& name) {
    std::string readable;
    for (const char c : name) {
        readable += std::isalnum(static_cast<unsigned char>(c)) != 0 ? c : '_';
    }
    if (readable.size() > 60) readable.resize(60);
    return readable + "-" + sha256_hex(name).substr(0, 8);
}

// Another user's run may have left codes to restore that this user cannot see: nothing may start.
Fault unreadable_note(const std::string& path, const std::string& why) {
    Fault fault;
    fault.cause = Cause::no_permission;
    fault.what = "an earlier run on this board left codes to restore in " + path +
                 ", which cannot be looked at: " + why;
    fault.hint = "Run once as that user, or give this one access to the file";
    return fault;
}

}  // namespace

std::string endpoint_name(const LinkDescription& link) {
    if (const auto* tcp = std::get_if<TcpLinkDescription>(&link)) {
        return "tcp:" + resolved_host(tcp->host) + ":" + std::to_string(tcp->port);
    }
    return "serial:" + serial_name(std::get<SerialLinkDescription>(link).path);
}

std::string lock_directory() {
    if (const char* set = std::getenv("LANEWRIGHT_LOCK_DIR"); set != nullptr && *set != '\0') {
        return set;
    }
    return fs::is_directory("/run/lock") ? "/run/lock/lanewright" : "/tmp/lanewright-locks";
}

Result<Endpoint> Endpoint::take(const LinkDescription& link) {
    Endpoint endpoint;
    endpoint.name_ = endpoint_name(link);
    const std::string folder = lock_directory();
    std::error_code error;
    if (fs::create_directories(folder, error)) ::chmod(folder.c_str(), 01777);
    const std::string stem = file_stem(endpoint.name_);
    const std::string path = folder + "/" + stem + ".lock";
    auto lock = FileLock::take(path, "the board at " + endpoint.name_);
    if (!lock) return lock.error();
    endpoint.lock_ = std::move(*lock);
    const std::string left_behind = lock_file_value(path, "note");
    error.clear();
    const bool stands = !left_behind.empty() && fs::exists(left_behind, error);
    if (!left_behind.empty() && error) return unreadable_note(left_behind, error.message());
    endpoint.note_path_ = stands ? left_behind : state_directory() + "/restore/" + stem + ".json";
    if (auto described = endpoint.describe("", ""); !described) return described.error();
    return endpoint;
}

Result<void> Endpoint::hold_board(const Identity& identity) {
    const bool has_serial =
        std::any_of(identity.values.begin(), identity.values.end(),
                    [](const IdentityValue& value) { return value.name == "serial"; });
    if (!has_serial) return {};
    std::string text;
    for (const IdentityValue& value : identity.values) {
        text += value.name + "=" + std::to_string(value.value) + ";";
    }
    const std::string path = lock_directory() + "/" + file_stem("board:" + text) + ".lock";
    auto lock = FileLock::take(path, "this board, over another link,");
    if (!lock) return lock.error();
    board_lock_ = std::move(*lock);
    holds_board_ = true;
    const std::string left_behind = lock_file_value(path, "note");
    std::error_code error;
    const bool stands = !left_behind.empty() && fs::exists(left_behind, error);
    if (!left_behind.empty() && error) return unreadable_note(left_behind, error.message());
    if (stands && left_behind != note_path_) {
        other_note_path_ = left_behind;  // its name stays in the lock file until it is mended
        return {};
    }
    return describe("", "");
}

std::vector<std::string> Endpoint::notes() const {
    std::vector<std::string> out{note_path_};
    if (!other_note_path_.empty()) out.push_back(other_note_path_);
    return out;
}

Result<void> Endpoint::describe(const std::string& store, const std::string& run) const {
    std::error_code error;
    const bool pending = fs::exists(note_path_, error);
    const std::string text = "endpoint=" + name_ + "\nnote=" + note_path_ +
                             "\nrestore=" + (pending ? "pending" : "none") + "\nstore=" + store +
                             "\nrun=" + run + "\n";
    auto described = lock_.describe(text);
    if (described && holds_board_) described = board_lock_.describe(text);
    return described;
}

}  // namespace lanewright
