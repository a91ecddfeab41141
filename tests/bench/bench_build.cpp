// How long a build takes with two jobs: a clean one of a fresh clone of what is committed, and one
// after a single source of adapt was touched. Wall time, so only a quiet machine tells.

#include <chrono>
#include <cstdlib>
#include <filesystem>
#include <iostream>
#include <stdexcept>
#include <string>

#include "tests/bench/rows.hpp"

namespace {

using lanewright::bench::Better;

// Seconds of a shell command; throws where it fails.
double timed(const std::string& command) {
    const auto begin = std::chrono::steady_clock::now();
    if (std::system(command.c_str()) != 0) throw std::runtime_error("failed: " + command);
    return std::chrono::duration<double>(std::chrono::steady_clock::now() - begin).count();
}

void measure(lanewright::bench::Rows& rows, const std::string& clone) {
    timed("git clone -q '" LANEWRIGHT_SOURCE_DIR "' '" + clone + "'");
    const std::string build = "cd '" + clone +
                              "' && export CCACHE_DISABLE=1 && cmake --preset dev >build.log && "
                              "cmake --build --preset dev >>build.log";
    rows.row({"clean build", timed(build), "s", Better::less, 240, 180});
    timed("touch '" + clone + "/adapt/search/score.cpp'");
    rows.row({"build after one adapt source", timed(build), "s", Better::less, 20, 10});
}

}  // namespace

int main() {
    std::string pattern = (std::filesystem::temp_directory_path() / "lanewright-XXXXXX").string();
    const std::string folder = ::mkdtemp(pattern.data());
    int status = 1;
    try {
        lanewright::bench::Rows rows(std::cout);
        measure(rows, folder + "/clone");
        status = rows.finish();
    } catch (const std::exception& error) {
        std::cerr << "bench_build: " << error.what() << "\n";
    }
    std::error_code ignored;
    std::filesystem::remove_all(folder, ignored);
    return status;
}
