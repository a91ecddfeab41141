#include "drivers/io/serial_link.hpp"

#include <fcntl.h>
#include <sys/file.h>
#include <unistd.h>
#include <boost/asio/as_tuple.hpp>
#include <boost/asio/posix/stream_descriptor.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <boost/asio/write.hpp>
#include <cerrno>
#include <cstring>
#include <filesystem>

#include "drivers/io/port_holder.hpp"
#include "drivers/io/serial_setup.hpp"

namespace lanewright {

namespace asio = boost::asio;
namespace fs = std::filesystem;
using asio::posix::stream_descriptor;
using boost::system::error_code;

namespace {

constexpr auto use_tuple = asio::as_tuple(asio::use_awaitable);
constexpr auto least_write_patience = std::chrono::seconds(2);

// 10 bits a byte on the line: start, eight, stop.
constexpr double bits_a_byte = 10;

class File {  // closes, with what it set undone, unless released
  public:
    explicit File(int fd) : fd_(fd) {}
    ~File() {
        if (fd_ < 0) return;
        if (exclusive_) hold_exclusively(fd_, false);
        ::close(fd_);
    }
    File(const File&) = delete;
    File& operator=(const File&) = delete;
    int get() const { return fd_; }
    int release() { return std::exchange(fd_, -1); }
    void hold() {
        hold_exclusively(fd_, true);
        exclusive_ = true;
    }
    bool exclusive() const { return exclusive_; }

  private:
    int fd_;
    bool exclusive_ = false;
};

// Numbered names change when adapters are plugged in another order; with one adapter there is
// nothing to mix up.
std::string list_of_others(const fs::path& resolved) {
    const std::string name = resolved.filename().string();
    const std::size_t digits = name.find_first_of("0123456789");
    const std::string stem = name.substr(0, digits);
    if (stem != "ttyUSB" && stem != "ttyACM") return {};
    std::string others;
    std::error_code ignored;
    for (fs::directory_iterator it("/dev", ignored), end; !ignored && it != end;
         it.increment(ignored)) {
        const std::string other = it->path().filename().string();
        if (other.starts_with(stem) && other != name)
            others += (others.empty() ? "" : ", ") + other;
    }
    return others;
}

class SerialLink final : public Link {
  public:
    SerialLink(TimeSource& time, SerialSettings settings)
        : time_(time), settings_(std::move(settings)) {
        traits_.name = "serial:" + settings_.path;
        traits_.bytes_per_s = settings_.baud / bits_a_byte;
        traits_.after_deadline = AfterDeadline::drain;
    }
    ~SerialLink() override { close(); }

    Task<void> open(TimePoint deadline) override {
        close();
        traits_.warnings.clear();
        File file(open_file());
        if (file.get() < 0) co_return cannot_open(errno);
        Fault fault = take(file);
        if (fault.cause != Cause::none) co_return fault;
        const auto port = adopt(file);
        const TimePoint settled = time_.now() + settings_.settle;
        if (settled > time_.now()) {
            Signal never(time_.io());
            co_await time_.wait(never, std::min(settled, deadline));
        }
        if (port_ != port) co_return unreachable("closed while opening");
        if (settled > deadline) {
            close();
            co_return unreachable("the settle time is longer than the deadline");
        }
        drop_pending_bytes(port->native_handle());
        co_return Result<void>{};
    }

    Task<std::size_t> read_some(std::span<std::byte> buffer) override {
        const auto port = port_;
        if (!port) co_return unreachable("the link is closed");
        const auto [failed, size] =
            co_await port->async_read_some(asio::buffer(buffer.data(), buffer.size()), use_tuple);
        if (!failed) co_return size;
        co_return lost(port, failed);
    }

    Task<void> write(Bytes bytes) override {
        const auto port = port_;
        if (!port) co_return unreachable("the link is closed");
        const std::chrono::duration<double> takes(static_cast<double>(bytes.size()) /
                                                  traits_.bytes_per_s);
        const auto patience =
            least_write_patience + 2 * std::chrono::duration_cast<std::chrono::nanoseconds>(takes);
        bool too_slow = false;
        const Alarm alarm(time_, time_.now() + patience, [port, &too_slow] {
            too_slow = true;
            error_code ignored;
            port->cancel(ignored);
        });
        const auto [failed, size] =
            co_await asio::async_write(*port, asio::buffer(bytes), use_tuple);
        if (!failed) co_return Result<void>{};
        Fault fault = lost(port, failed);
        if (too_slow) fault.what = traits_.name + ": the port takes no bytes";
        co_return fault;
    }

    // At once, and not only at the next open: an adapter that comes back while its old file is
    // still open gets another number.
    void close() noexcept override {
        if (!port_) return;
        const int fd = port_->native_handle();
        // Bytes still to be sent would make the close wait for a board that has gone silent.
        drop_pending_bytes(fd);
        if (exclusive_) hold_exclusively(fd, false);
        exclusive_ = false;
        error_code ignored;
        port_->close(ignored);
        port_.reset();
    }

    bool is_open() const override { return port_ != nullptr; }
    const LinkTraits& traits() const override { return traits_; }

  private:
    int open_file() const {
        return ::open(settings_.path.c_str(), O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    }

    Fault unreachable(std::string what) const {
        return fault_of(Cause::unreachable, std::move(what));
    }

    Fault fault_of(Cause cause, std::string what, std::string hint = {}) const {
        Fault fault;
        fault.cause = cause;
        fault.what = traits_.name + ": " + std::move(what);
        fault.hint = std::move(hint);
        return fault;
    }

    Fault cannot_open(int number) const {
        if (number == EACCES || number == EPERM) {
            return fault_of(Cause::no_permission, "no permission to open the port",
                            "Add the user to the port's group (often dialout), then log in again.");
        }
        if (number == EBUSY) return busy(std::nullopt);
        const bool absent = number == ENOENT || number == ENXIO || number == ENODEV;
        return fault_of(Cause::unreachable, std::strerror(number),
                        absent ? "Is the adapter plugged in? /dev/serial/by-id lists those there "
                                 "are."
                               : "");
    }

    Fault busy(const std::optional<Holder>& holder) const {
        return fault_of(Cause::busy, "the port is held by " + text_of(holder),
                        "End that process, or use another port. A modem manager lets go of a new "
                        "adapter after some seconds.");
    }

    // Locks and configures; on a fault the File undoes all of it.
    Fault take(File& file) {
        if (::flock(file.get(), LOCK_EX | LOCK_NB) != 0) return busy(find_holder(file.get()));
        // The superuser's open succeeds on a port that is held exclusively: ask.
        if (is_held_exclusively(file.get())) return busy(find_holder(file.get()));
        std::error_code unresolved;
        const fs::path resolved = fs::canonical(settings_.path, unresolved);
        const bool numbered = resolved == fs::path(settings_.path);
        const std::string others = numbered ? list_of_others(resolved) : std::string();
        if (!others.empty()) {
            return fault_of(
                Cause::bad_config,
                "this name changes with the order of plugging in, and there is also " + others,
                "Name the port as in /dev/serial/by-id or /dev/serial/by-path.");
        }
        // A pseudo-terminal's other side may keep it open, and the mark would outlive us there.
        if (!is_pseudo_terminal(file.get())) file.hold();
        const std::string wrong = configure_line(
            file.get(), {.baud = settings_.baud, .hang_up_on_close = settings_.hang_up_on_close});
        if (!wrong.empty()) return fault_of(Cause::bad_config, wrong);
        const std::string lines = set_modem_lines(file.get(), settings_.dtr, settings_.rts);
        if (!lines.empty()) return fault_of(Cause::io, lines);
        const std::string slow =
            ask_for_low_latency(file.get(), resolved.filename().string(), "/sys");
        if (!slow.empty()) traits_.warnings.push_back(traits_.name + ": " + slow);
        return Fault{};
    }

    std::shared_ptr<stream_descriptor> adopt(File& file) {
        exclusive_ = file.exclusive();
        port_ = std::make_shared<stream_descriptor>(time_.io(), file.release());
        return port_;
    }

    // End of file, EIO, ENXIO and ENODEV are all what an unplugged adapter looks like.
    Fault lost(const std::shared_ptr<stream_descriptor>& port, const error_code& why) {
        if (port_ == port) close();
        if (why == asio::error::eof || why.value() == EIO || why.value() == ENXIO ||
            why.value() == ENODEV) {
            return unreachable("the port is gone (unplugged, or its other side closed)");
        }
        if (why == asio::error::operation_aborted || why == asio::error::bad_descriptor) {
            return unreachable("the link was closed");
        }
        return unreachable(why.message());
    }

    TimeSource& time_;
    SerialSettings settings_;
    LinkTraits traits_;
    bool exclusive_ = false;
    std::shared_ptr<stream_descriptor> port_;
};

}  // namespace

std::unique_ptr<Link> make_serial_link(TimeSource& time, SerialSettings settings) {
    return std::make_unique<SerialLink>(time, std::move(settings));
}

}  // namespace lanewright
