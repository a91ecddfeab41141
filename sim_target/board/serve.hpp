#pragma once
// Purpose:   the verb `serve`: a board that answers until it is told to end.
// Ownership: owns everything it makes; links and ports are gone when it returns.
// Threads:   runs its loop in the calling thread.

#include <string>
#include <vector>

namespace lanewright::sim {

struct ServeOptions {
    std::string target_path;
    std::vector<std::string> tcp, pty;  // HOST:PORT; paths of links
};

// The exit code: 0 after SIGTERM or SIGINT, 64 without any wire, 69 where a port or link cannot
// be had, 74 where the ready line cannot be written, 78 for a target file that cannot be used.
// Throws BadData for a channel file that cannot be used. Prints one line on stdout when ready:
// {"ready":true,"tcp":["127.0.0.1:40123"],"pty":["LINK"]}
int run_serve(const ServeOptions& options);

}  // namespace lanewright::sim
