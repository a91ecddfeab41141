#include <fcntl.h>
#include <termios.h>
#include <unistd.h>
#include <boost/asio/as_tuple.hpp>
#include <boost/asio/posix/stream_descriptor.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <cerrno>
#include <cstdlib>
#include <cstring>
#include <filesystem>

#include "sim_target/board/servers.hpp"

namespace lanewright::sim {

namespace {

namespace asio = boost::asio;
namespace fs = std::filesystem;
using boost::system::error_code;

constexpr double bits_a_byte = 10;  // start, eight, stop

class Descriptor {
  public:
    explicit Descriptor(int fd) : fd_(fd) {}
    ~Descriptor() {
        if (fd_ >= 0) ::close(fd_);
    }
    Descriptor(Descriptor&& other) noexcept : fd_(other.release()) {}
    Descriptor(const Descriptor&) = delete;
    Descriptor& operator=(const Descriptor&) = delete;
    int get() const { return fd_; }
    int release() { return std::exchange(fd_, -1); }

  private:
    int fd_;
};

struct Terminal {
    Descriptor master, slave;
    std::string path;
};

[[noreturn]] void fail(const std::string& what) {
    throw ServeError("pseudo-terminal: " + what + ": " + std::strerror(errno));
}

// The slave stays open here: without any the master reads nothing but errors, and a client that
// closes would be taken for a cable that is gone.
Terminal open_terminal() {
    Descriptor master(::posix_openpt(O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC));
    if (master.get() < 0) fail("none to be had");
    char name[128];
    if (::grantpt(master.get()) != 0 || ::unlockpt(master.get()) != 0 ||
        ::ptsname_r(master.get(), name, sizeof name) != 0) {
        fail("not unlocked");
    }
    Descriptor slave(::open(name, O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC));
    if (slave.get() < 0) fail(name);
    termios settings{};
    if (::tcgetattr(slave.get(), &settings) != 0) fail(name);
    ::cfmakeraw(&settings);
    if (::tcsetattr(slave.get(), TCSANOW, &settings) != 0) fail(name);
    return {std::move(master), std::move(slave), name};
}

class PtyEnd final : public WireEnd {
  public:
    PtyEnd(Hub& hub, Terminal terminal)
        : WireEnd(hub, hub.wire.baud == 0 ? 0 : bits_a_byte / hub.wire.baud),
          slave_(std::move(terminal.slave)),
          master_(hub.time.io(), terminal.master.release()) {
        error_code ignored;
        static_cast<void>(master_.non_blocking(true, ignored));
    }

  private:
    asio::awaitable<std::size_t> read_bytes(std::span<std::uint8_t> buffer) override {
        const auto [failed, size] = co_await master_.async_read_some(
            asio::buffer(buffer.data(), buffer.size()), asio::as_tuple(asio::use_awaitable));
        co_return failed ? 0 : size;
    }

    // Nobody may be reading: a line does not wait for that, it loses what is not taken in time.
    asio::awaitable<bool> write_bytes(Octets bytes) override {
        const TimePoint patience = hub().time.now() + std::chrono::milliseconds(200);
        std::size_t sent = 0;
        while (sent < bytes.size() && !stopped().requested()) {
            error_code failed;
            sent += master_.write_some(asio::buffer(bytes) + sent, failed);
            if (!failed) continue;
            if (failed != asio::error::would_block && failed != asio::error::try_again) {
                co_return false;
            }
            if (hub().time.now() >= patience) break;
            co_await hub().time.sleep_until(hub().time.now() + std::chrono::milliseconds(2),
                                            stopped());
        }
        co_return !stopped().requested();
    }

    void shut() override {
        error_code ignored;
        static_cast<void>(master_.close(ignored));
    }

    Descriptor slave_;
    asio::posix::stream_descriptor master_;
};

class PtyServer final : public Server {
  public:
    PtyServer(Hub& hub, std::string link) : hub_(hub), link_(std::move(link)) {
        open();
        hub_.cut.emplace_back([this] { cut(); });
    }
    ~PtyServer() override { cut(); }

    std::string address() const override { return link_; }

    Task<void> run() override {
        hub_.tasks.spawn("pty stop", close_at_stop());
        const Stop stop = hub_.tasks.stop_of_tasks();
        while (!stop.requested()) {
            if (const auto end = std::exchange(fresh_, nullptr)) co_await WireEnd::run(end);
            remove_link();
            if (stop.requested()) break;
            co_await hub_.time.sleep_until(hub_.time.now() + std::max(hub_.time_down(), at_least),
                                           stop);
            if (!stop.requested()) open_again();
        }
        cut();
        co_return Result<void>{};
    }

  private:
    static constexpr std::chrono::nanoseconds at_least = std::chrono::milliseconds(10);

    void open() {
        Terminal terminal = open_terminal();
        const std::string path = terminal.path;
        fresh_ = std::make_shared<PtyEnd>(hub_, std::move(terminal));
        current_ = fresh_;
        put_link(path);
    }

    void open_again() {
        try {
            open();
        } catch (const ServeError&) {
            fresh_ = nullptr;  // tried again after a while
        }
    }

    // Made under another name and moved into place, so that a client never sees none.
    void put_link(const std::string& path) {
        std::error_code failed;
        const auto there = fs::symlink_status(link_, failed);
        if (fs::exists(there) && !fs::is_symlink(there)) {
            throw ServeError("--pty " + link_ + ": something other than a link is there already");
        }
        const std::string made = link_ + "." + std::to_string(::getpid());
        fs::remove(made, failed);
        fs::create_symlink(path, made, failed);
        if (!failed) fs::rename(made, link_, failed);
        if (failed) throw ServeError("--pty " + link_ + ": " + failed.message());
        target_ = path;
    }

    // Only the link that was put here: another process may have replaced it meanwhile.
    void remove_link() noexcept {
        std::error_code failed;
        if (!target_.empty() && fs::read_symlink(link_, failed) == target_) {
            fs::remove(link_, failed);
        }
        target_.clear();
    }

    Task<void> close_at_stop() {
        co_await hub_.time.sleep_until(TimePoint::max(), hub_.tasks.stop_of_tasks());
        cut();
        co_return Result<void>{};
    }

    void cut() {
        remove_link();
        fresh_ = nullptr;
        if (const auto end = current_.lock()) end->close();
    }

    Hub& hub_;
    std::string link_, target_;
    std::shared_ptr<PtyEnd> fresh_;  // opened, not yet run
    std::weak_ptr<PtyEnd> current_;
};

}  // namespace

std::unique_ptr<Server> make_pty_server(Hub& hub, const std::string& link) {
    return std::make_unique<PtyServer>(hub, link);
}

}  // namespace lanewright::sim
