#pragma once
// Purpose:   which program this is, for manifests and --version.
// Ownership: static text. Threads: no shared state.

#include <string>

namespace lanewright {

std::string program_version();    // 0.1.0
std::string git_hash();           // with "-dirty" where the tree had changes; "unknown" outside git
std::string build_description();  // compiler and build type
std::string cpu_description();
std::string host_name();

}  // namespace lanewright
