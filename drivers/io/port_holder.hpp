#pragma once
// Purpose:   who holds a port or a lock file, so that a message can name it.
// Ownership: nothing kept.
// Threads:   any; reads /proc, milliseconds: only on the way to a failure.

#include <sys/types.h>
#include <optional>
#include <string>

namespace lanewright {

struct Holder {
    pid_t pid = 0;
    std::string command;  // empty where /proc does not tell
};

// The process that has the file locked (flock), else one other than this that has it open.
// Empty where neither can be seen, as with a process of another user.
std::optional<Holder> find_holder(int fd);

// "process 1234 (name)", or "another process".
std::string text_of(const std::optional<Holder>& holder);

}  // namespace lanewright
