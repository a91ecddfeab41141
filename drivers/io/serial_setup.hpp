#pragma once
// Purpose:   the ioctls of a serial port, apart from everything else because the kernel's and the
//            C library's headers for them clash.
// Ownership: works on a file descriptor of the caller's.
// Threads:   any; blocking calls of microseconds only.
// A pseudo-terminal lacks modem lines and driver settings: those calls then do nothing.

#include <cstdint>
#include <optional>
#include <string>

namespace lanewright {

struct SerialLine {
    std::uint32_t baud = 921600;
    bool hang_up_on_close = false;
};

// Raw 8N1 at that rate, read back and compared. Empty, or what went wrong and what to do.
std::string configure_line(int fd, const SerialLine& line);

// Empty, or what went wrong.
std::string set_modem_lines(int fd, std::optional<bool> dtr, std::optional<bool> rts);

void drop_pending_bytes(int fd);

bool is_pseudo_terminal(int fd);
bool is_held_exclusively(int fd);          // TIOCGEXCL
void hold_exclusively(int fd, bool held);  // TIOCEXCL, TIOCNXCL

// Asks the driver for low latency. A warning with what to do if the adapter still collects bytes
// for more than 2 ms, else empty. `sysfs` is /sys, or a copy of its shape in a test.
std::string ask_for_low_latency(int fd, const std::string& device_name, const std::string& sysfs);

}  // namespace lanewright
