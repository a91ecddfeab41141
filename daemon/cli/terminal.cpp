#include "daemon/cli/terminal.hpp"

#include <unistd.h>

#include <cstdio>
#include <cstdlib>
#include <nlohmann/json.hpp>
#include <string_view>

#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/log.hpp"
#include "daemon/views/run_json.hpp"

namespace lanewright {

bool is_terminal(int descriptor) { return ::isatty(descriptor) == 1; }

bool may_colour(int descriptor) {
    const char* off = std::getenv("NO_COLOR");
    const char* terminal = std::getenv("TERM");
    const bool dumb = terminal == nullptr || std::string_view(terminal) == "dumb";
    return is_terminal(descriptor) && !dumb && (off == nullptr || *off == '\0');
}

void print(const std::string& text) {
    std::fwrite(text.data(), 1, text.size(), stdout);
    std::fflush(stdout);
}

void print_error(const std::string& text) {
    log_note(text);
    std::fprintf(stderr, "%s\n", text.c_str());
    std::fflush(stderr);
}

int report(const Fault& fault, bool json) {
    const int code = exit_code_of(fault.cause);
    if (json) {
        print(error_json(fault, code).dump(2, ' ', false,
                                           nlohmann::json::error_handler_t::replace) +
              "\n");
    }
    print_error("lanewright: " + fault.text());
    return code;
}

}  // namespace lanewright
