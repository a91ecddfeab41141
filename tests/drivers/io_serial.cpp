#include <asm/termbits.h>
#include <fcntl.h>
#include <sys/file.h>
#include <sys/ioctl.h>
#include <sys/wait.h>
#include <unistd.h>
#include <catch2/catch.hpp>
#include <csignal>
#include <cstdlib>
#include <filesystem>
#include <fstream>

#include "drivers/io/port_holder.hpp"
#include "drivers/io/serial_link.hpp"
#include "drivers/io/serial_setup.hpp"
#include "drivers/io/task_group.hpp"

using namespace lanewright;
using namespace std::chrono_literals;
namespace asio = boost::asio;

namespace {

// A hang in a pseudo-terminal must fail the test, not block it.
struct Guard {
    Guard() { ::alarm(30); }
    ~Guard() { ::alarm(0); }
};

struct Terminal {
    Guard guard;
    int master = ::posix_openpt(O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    std::string path;
    asio::io_context io;
    SteadyTimeSource time{io};
    Terminal() {
        REQUIRE(master >= 0);
        REQUIRE(::grantpt(master) == 0);
        REQUIRE(::unlockpt(master) == 0);
        path = ::ptsname(master);
    }
    ~Terminal() { hang_up(); }
    void hang_up() {
        if (master >= 0) ::close(master);
        master = -1;
    }
    std::unique_ptr<Link> link(std::uint32_t baud = 921600) {
        return make_serial_link(time, {.path = path, .baud = baud});
    }
    Result<void> open(Link& link) { return run_until_done(time, link.open(time.now() + 1s)); }
};

Task<std::string> read_text(Link& link, std::size_t size) {
    std::string text;
    while (text.size() < size) {
        std::array<std::byte, 64> buffer;
        auto got = co_await link.read_some(buffer);
        if (got.has_error()) co_return got.error();
        for (std::size_t i = 0; i < *got; ++i) text += static_cast<char>(buffer[i]);
    }
    co_return text;
}

termios2 settings_of(int fd) {
    termios2 settings{};
    REQUIRE(::ioctl(fd, TCGETS2, &settings) == 0);
    return settings;
}

// A process that holds the lock on the path until it is told to end.
class LockHolder {
  public:
    explicit LockHolder(const std::string& path) {
        int ready[2];
        REQUIRE(::pipe(ready) == 0);
        pid_ = ::fork();
        if (pid_ == 0) {
            const int fd = ::open(path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK);
            const char locked = ::flock(fd, LOCK_EX | LOCK_NB) == 0 ? 'y' : 'n';
            if (::write(ready[1], &locked, 1) != 1) ::_exit(1);
            for (;;) ::pause();
        }
        char locked = 'n';
        REQUIRE(::read(ready[0], &locked, 1) == 1);
        REQUIRE(locked == 'y');
        ::close(ready[0]);
        ::close(ready[1]);
    }
    ~LockHolder() {
        ::kill(pid_, SIGKILL);
        ::waitpid(pid_, nullptr, 0);
    }
    LockHolder(const LockHolder&) = delete;
    LockHolder& operator=(const LockHolder&) = delete;
    pid_t pid() const { return pid_; }

  private:
    pid_t pid_ = 0;
};

}  // namespace

TEST_CASE("A serial link carries every byte value both ways unchanged") {
    Terminal terminal;
    auto link = terminal.link();
    REQUIRE(terminal.open(*link).has_value());
    Bytes all;
    std::string text;
    for (int value = 0; value < 256; ++value) {
        all.push_back(static_cast<std::byte>(value));
        text += static_cast<char>(value);
    }
    REQUIRE(run_until_done(terminal.time, link->write(all)).has_value());
    std::array<char, 512> seen;
    CHECK(::read(terminal.master, seen.data(), seen.size()) == 256);
    CHECK(std::string(seen.data(), 256) == text);
    REQUIRE(::write(terminal.master, text.data(), text.size()) == 256);
    CHECK(*run_until_done(terminal.time, read_text(*link, 256)) == text);
}

TEST_CASE("A serial link sets rates that have no name, raw 8N1, and reads them back") {
    // 1,500,000 and 12,000,000 baud are not among the rates that POSIX termios names.
    const std::uint32_t baud = GENERATE(9600u, 921600u, 1500000u, 2500000u, 12000000u);
    Terminal terminal;
    auto link = terminal.link(baud);
    REQUIRE(terminal.open(*link).has_value());
    const int fd = ::open(terminal.path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    const termios2 settings = settings_of(fd);
    ::close(fd);
    CHECK(settings.c_ospeed == baud);
    CHECK(settings.c_ispeed == baud);
    CHECK((settings.c_cflag & (CSIZE | PARENB | CSTOPB | HUPCL)) == CS8);
    CHECK(settings.c_lflag == 0);
    CHECK(settings.c_iflag == 0);
    CHECK(settings.c_oflag == 0);
    CHECK(link->traits().bytes_per_s == Approx(baud / 10.0));
}

TEST_CASE("A port that another process has locked is refused and the error names its pid") {
    Terminal terminal;
    const int kept = ::open(terminal.path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    {
        LockHolder holder(terminal.path);
        auto link = terminal.link();
        const auto opened = terminal.open(*link);
        REQUIRE(opened.has_error());
        CHECK(opened.error().cause == Cause::busy);
        CHECK(opened.error().text().find("process " + std::to_string(holder.pid())) !=
              std::string::npos);
        CHECK_FALSE(link->is_open());
    }
    auto link = terminal.link();
    CHECK(terminal.open(*link).has_value());
    ::close(kept);
}

TEST_CASE("A port that is marked exclusive is refused even to the superuser") {
    Terminal terminal;
    const int other = ::open(terminal.path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    hold_exclusively(other, true);
    CHECK(is_held_exclusively(other));
    auto link = terminal.link();
    CHECK(terminal.open(*link).error().cause == Cause::busy);
    hold_exclusively(other, false);
    CHECK(terminal.open(*link).has_value());
    ::close(other);
}

TEST_CASE("A closed serial link leaves the port free for the next") {
    Terminal terminal;
    const int kept = ::open(terminal.path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    for (int i = 0; i < 3; ++i) {
        auto link = terminal.link();
        REQUIRE(terminal.open(*link).has_value());
        auto second = terminal.link();
        CHECK(terminal.open(*second).error().cause == Cause::busy);
        link->close();
        CHECK(terminal.open(*second).has_value());
    }
    CHECK(is_pseudo_terminal(kept));
    ::close(kept);
}

TEST_CASE("A hung-up port is a lost link for a pending read and closes at once") {
    Terminal terminal;
    auto link = terminal.link();
    REQUIRE(terminal.open(*link).has_value());
    const Alarm alarm(terminal.time, terminal.time.now() + 10ms, [&] { terminal.hang_up(); });
    const auto lost = run_until_done(terminal.time, read_text(*link, 1));
    REQUIRE(lost.has_error());
    CHECK(lost.error().cause == Cause::unreachable);
    CHECK_FALSE(link->is_open());
    CHECK(terminal.open(*link).error().cause == Cause::unreachable);
}

TEST_CASE("A serial write to a board that reads nothing ends after its patience") {
    Terminal terminal;
    auto link = terminal.link(4'000'000);
    REQUIRE(terminal.open(*link).has_value());
    const TimePoint start = terminal.time.now();
    const auto sent = run_until_done(terminal.time, link->write(Bytes(200'000)));
    REQUIRE(sent.has_error());
    CHECK(sent.error().what.find("takes no bytes") != std::string::npos);
    CHECK(terminal.time.now() - start < 6s);
}

TEST_CASE("Bytes from before the settle time's end are dropped") {
    Terminal terminal;
    auto link = make_serial_link(terminal.time, {.path = terminal.path, .settle = 30ms});
    const Alarm early(terminal.time, terminal.time.now() + 5ms,
                      [&] { REQUIRE(::write(terminal.master, "junk", 4) == 4); });
    const TimePoint start = terminal.time.now();
    REQUIRE(terminal.open(*link).has_value());
    CHECK(terminal.time.now() - start >= 30ms);
    REQUIRE(::write(terminal.master, "good", 4) == 4);
    CHECK(*run_until_done(terminal.time, read_text(*link, 4)) == "good");
}

TEST_CASE("What cannot be opened or is no serial port is refused with a reason") {
    const Guard guard;
    asio::io_context io;
    SteadyTimeSource time(io);
    auto absent = make_serial_link(time, {.path = "/dev/serial/by-id/no-such-adapter"});
    const auto missing = run_until_done(time, absent->open(time.now() + 1s));
    CHECK(missing.error().cause == Cause::unreachable);
    CHECK(missing.error().hint.find("plugged in") != std::string::npos);
    auto file = make_serial_link(time, {.path = "/dev/null"});
    const auto wrong = run_until_done(time, file->open(time.now() + 1s));
    CHECK(wrong.error().cause == Cause::bad_config);
    CHECK(wrong.error().what.find("not a serial port") != std::string::npos);
}

TEST_CASE("A slow adapter's latency timer is set, or a warning gives the exact udev rule") {
    Terminal terminal;
    const int fd = ::open(terminal.path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    const auto sysfs =
        std::filesystem::temp_directory_path() / ("lanewright-sysfs-" + std::to_string(::getpid()));
    const auto knob = sysfs / "bus/usb-serial/devices/ttyUSB7/latency_timer";
    std::filesystem::create_directories(knob.parent_path());
    CHECK(ask_for_low_latency(fd, "ttyUSB7", sysfs).empty());
    std::ofstream(knob) << 16 << std::flush;
    CHECK(ask_for_low_latency(fd, "ttyUSB7", sysfs).empty());
    int latency_ms = 0;
    std::ifstream(knob) >> latency_ms;
    CHECK(latency_ms == 1);
    // What cannot be written, not even by the superuser: a link into /proc.
    std::filesystem::remove(knob);
    std::filesystem::create_symlink("/proc/sys/kernel/ngroups_max", knob);
    const std::string warning = ask_for_low_latency(fd, "ttyUSB7", sysfs);
    CHECK(warning.find("ACTION==\"add\", SUBSYSTEM==\"usb-serial\", DRIVER==\"ftdi_sio\", "
                       "ATTR{latency_timer}=\"1\"") != std::string::npos);
    std::filesystem::remove_all(sysfs);
    ::close(fd);
}
