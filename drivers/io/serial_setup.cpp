#include "drivers/io/serial_setup.hpp"

#include <asm/termbits.h>
#include <linux/serial.h>
#include <sys/ioctl.h>
#include <sys/stat.h>
#include <sys/sysmacros.h>
#include <cerrno>
#include <cmath>
#include <cstring>
#include <fstream>

namespace lanewright {

namespace {

std::string because(const char* what) {
    return std::string(what) + ": " + std::strerror(errno);
}

bool lacks_the_call() {
    return errno == ENOTTY || errno == EINVAL || errno == ENOSYS;
}

// An adapter that divides its clock may be this far off; an 8N1 byte survives it.
bool near_enough(std::uint32_t wanted, std::uint32_t got) {
    return std::abs(static_cast<double>(got) - static_cast<double>(wanted)) <= 0.02 * wanted;
}

std::optional<int> read_number(const std::string& path) {
    std::ifstream file(path);
    int value = 0;
    if (file >> value) return value;
    return std::nullopt;
}

}  // namespace

std::string configure_line(int fd, const SerialLine& line) {
    struct termios2 settings{};
    if (::ioctl(fd, TCGETS2, &settings) != 0) return because("not a serial port");
    settings.c_iflag = 0;
    settings.c_oflag = 0;
    settings.c_lflag = 0;
    settings.c_cflag = BOTHER | CS8 | CREAD | CLOCAL | (BOTHER << IBSHIFT);
    if (line.hang_up_on_close) settings.c_cflag |= HUPCL;
    settings.c_cc[VMIN] = 1;
    settings.c_cc[VTIME] = 0;
    settings.c_ispeed = line.baud;
    settings.c_ospeed = line.baud;
    if (::ioctl(fd, TCSETS2, &settings) != 0) {
        return because(("no line of " + std::to_string(line.baud) + " baud, 8N1").c_str());
    }
    struct termios2 got{};
    if (::ioctl(fd, TCGETS2, &got) != 0) return because("settings not read back");
    if (!near_enough(line.baud, got.c_ospeed) || !near_enough(line.baud, got.c_ispeed)) {
        return "the port does " + std::to_string(got.c_ospeed) + " baud, not " +
               std::to_string(line.baud);
    }
    if ((got.c_cflag & CSIZE) != CS8 || (got.c_cflag & (PARENB | CSTOPB)) != 0) {
        return "the port does not do 8 bits, no parity, one stop bit";
    }
    return {};
}

std::string set_modem_lines(int fd, std::optional<bool> dtr, std::optional<bool> rts) {
    const auto set = [fd](std::optional<bool> level, int line) {
        if (!level) return true;
        return ::ioctl(fd, *level ? TIOCMBIS : TIOCMBIC, &line) == 0 || lacks_the_call();
    };
    if (!set(dtr, TIOCM_DTR)) return because("DTR not set");
    if (!set(rts, TIOCM_RTS)) return because("RTS not set");
    return {};
}

void drop_pending_bytes(int fd) {
    ::ioctl(fd, TCFLSH, TCIOFLUSH);
}

bool is_pseudo_terminal(int fd) {
    struct stat status{};
    if (::fstat(fd, &status) != 0 || !S_ISCHR(status.st_mode)) return false;
    // Unix98 pseudo-terminal slaves have the majors 136 to 143 (Linux, Documentation/admin-guide/
    // devices.txt).
    const unsigned major_number = major(status.st_rdev);
    return major_number >= 136 && major_number <= 143;
}

bool is_held_exclusively(int fd) {
    int exclusive = 0;
    return ::ioctl(fd, TIOCGEXCL, &exclusive) == 0 && exclusive != 0;
}

void hold_exclusively(int fd, bool held) {
    ::ioctl(fd, held ? TIOCEXCL : TIOCNXCL);
}

std::string ask_for_low_latency(int fd, const std::string& device_name, const std::string& sysfs) {
    struct serial_struct driver{};
    if (::ioctl(fd, TIOCGSERIAL, &driver) == 0) {
        driver.flags |= ASYNC_LOW_LATENCY;
        ::ioctl(fd, TIOCSSERIAL, &driver);
    }
    const std::string knob = sysfs + "/bus/usb-serial/devices/" + device_name + "/latency_timer";
    auto latency_ms = read_number(knob);
    if (!latency_ms || *latency_ms <= 2) return {};
    std::ofstream(knob) << 1 << std::flush;
    latency_ms = read_number(knob);
    if (!latency_ms || *latency_ms <= 2) return {};
    return "the adapter collects bytes for " + std::to_string(*latency_ms) +
           " ms before it hands them on, which limits a board to about " +
           std::to_string(1000 / *latency_ms) +
           " answers a second. Put this line into /etc/udev/rules.d/60-usb-serial-latency.rules "
           "and plug the adapter in again: ACTION==\"add\", SUBSYSTEM==\"usb-serial\", "
           "DRIVER==\"ftdi_sio\", ATTR{latency_timer}=\"1\"";
}

}  // namespace lanewright
