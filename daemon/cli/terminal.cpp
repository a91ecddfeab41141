#include "daemon/cli/terminal.hpp"

#include <fcntl.h>
#include <unistd.h>

#include <cerrno>
#include <cstdio>
#include <cstdlib>
#include <cstring>
#include <nlohmann/json.hpp>
#include <string_view>

#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/log.hpp"
#include "daemon/views/run_json.hpp"
#include "daemon/views/run_text.hpp"

namespace lanewright {

void secure_standard_streams() {
    for (const int descriptor : {STDIN_FILENO, STDOUT_FILENO, STDERR_FILENO}) {
        if (::fcntl(descriptor, F_GETFD) >= 0 || errno != EBADF) continue;
        // The lowest free number is this one, as those below are open.
        if (::open("/dev/null", O_RDWR) != descriptor) std::abort();
    }
}

bool is_terminal(int descriptor) {
    return ::isatty(descriptor) == 1;
}

bool may_colour(int descriptor) {
    const char* off = std::getenv("NO_COLOR");
    const char* terminal = std::getenv("TERM");
    const bool dumb = terminal == nullptr || std::string_view(terminal) == "dumb";
    return is_terminal(descriptor) && !dumb && (off == nullptr || *off == '\0');
}

void print(const std::string& text) {
    const bool all = std::fwrite(text.data(), 1, text.size(), stdout) == text.size();
    if (all && std::fflush(stdout) == 0) return;
    throw OutputError(std::string("stdout cannot be written: ") + std::strerror(errno));
}

void print_error(const std::string& text) {
    const std::string shown = printable(text);
    log_note(shown);
    std::fprintf(stderr, "%s\n", shown.c_str());
    std::fflush(stderr);
}

namespace {

void print_object(const nlohmann::ordered_json& object) {
    print(object.dump(2, ' ', false, nlohmann::json::error_handler_t::replace) + "\n");
}

}  // namespace

int report(const Fault& fault, bool json) {
    const int code = exit_code_of(fault.cause);
    if (json) print_object(error_json(fault, code));
    print_error("lanewright: " + fault.text());
    return code;
}

int report_usage(const std::string& what, bool json) {
    Fault fault;
    fault.what = what;
    auto object = error_json(fault, exit_usage);
    object["error"]["cause"] = "usage";
    if (json) print_object(object);
    print_error("lanewright: " + what);
    return exit_usage;
}

}  // namespace lanewright
