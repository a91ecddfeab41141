#include "daemon/engine/version.hpp"

#include <unistd.h>

#include <fstream>

#include "lanewright_build.hpp"

namespace lanewright {

std::string program_version() {
    return LANEWRIGHT_VERSION;
}

std::string git_hash() {
    return LANEWRIGHT_GIT_HASH;
}

std::string build_description() {
    return "g++ " __VERSION__ ", " LANEWRIGHT_BUILD_TYPE;
}

std::string cpu_description() {
    std::ifstream info("/proc/cpuinfo");
    std::string line;
    while (std::getline(info, line)) {
        if (line.starts_with("model name")) {
            const std::size_t colon = line.find(": ");
            if (colon != std::string::npos) return line.substr(colon + 2);
        }
    }
    return "unknown";
}

std::string host_name() {
    char name[256] = {};
    return ::gethostname(name, sizeof name - 1) == 0 ? name : "unknown";
}

}  // namespace lanewright
