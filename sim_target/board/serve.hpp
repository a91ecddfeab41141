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
    int population_board = -1;          // of a target with a population; below zero: the first
};

// The exit code: 0 after SIGTERM or SIGINT, 64 without any wire or for a board that the population
// has not, 69 where a port or link cannot be had, 74 where the ready line cannot be written, 78 for
// a target file that cannot be used. Throws BadData for a channel file that cannot be used. Prints
// one line on stdout when ready:
// {"ready":true,"tcp":["127.0.0.1:40123"],"pty":["LINK"]}
int run_serve(const ServeOptions& options);

}  // namespace lanewright::sim
