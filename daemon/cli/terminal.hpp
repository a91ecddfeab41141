#pragma once
// Purpose:   where output goes and how it may look there.
// Ownership: none. Threads: the main thread.

#include <stdexcept>
#include <string>

#include "drivers/faults/fault.hpp"

namespace lanewright {

// Colours on that descriptor: a terminal, no NO_COLOR (no-color.org), TERM not "dumb".
bool may_colour(int descriptor);
bool is_terminal(int descriptor);

// Descriptors 0 to 2 that the parent left closed are opened on /dev/null: a store, lock or link
// must never get the number of stdout.
void secure_standard_streams();

// stdout could not take what was printed: a full disk, a reader that went away. Exit 74.
class OutputError : public std::runtime_error {
  public:
    using std::runtime_error::runtime_error;
};

void print(const std::string& text);        // stdout; throws OutputError
void print_error(const std::string& text);  // stderr, with a newline; and the log

// The fault as the verb's last word: a line on stderr, with --json an object on stdout too; its
// exit code.
int report(const Fault& fault, bool json);
// The same for words of the command line that cannot be used; exit 64.
int report_usage(const std::string& what, bool json);

}  // namespace lanewright
