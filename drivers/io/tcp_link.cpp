#include "drivers/io/tcp_link.hpp"

#include <netinet/tcp.h>
#include <sys/socket.h>
#include <boost/asio/as_tuple.hpp>
#include <boost/asio/ip/tcp.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <boost/asio/write.hpp>

namespace lanewright {

namespace asio = boost::asio;
using asio::ip::tcp;
using boost::system::error_code;

namespace {

constexpr auto write_patience = std::chrono::seconds(5);
constexpr auto use_tuple = asio::as_tuple(asio::use_awaitable);

Fault unreachable(const std::string& link, std::string what, std::string hint = {}) {
    Fault fault;
    fault.cause = Cause::unreachable;
    fault.what = link + ": " + std::move(what);
    fault.hint = std::move(hint);
    return fault;
}

// A dead peer without an open question shows after about 25 s instead of two hours.
void set_options(tcp::socket& socket) {
    error_code ignored;
    socket.set_option(tcp::no_delay(true), ignored);
    socket.set_option(asio::socket_base::keep_alive(true), ignored);
    const auto set = [&socket](int name, int value) {
        ::setsockopt(socket.native_handle(), IPPROTO_TCP, name, &value, sizeof value);
    };
    set(TCP_KEEPIDLE, 10);
    set(TCP_KEEPINTVL, 5);
    set(TCP_KEEPCNT, 3);
}

struct Lookup {
    Lookup(asio::io_context& io) : resolver(io), done(io) {}
    tcp::resolver resolver;
    Signal done;
    error_code failed;
    std::vector<tcp::endpoint> found;
};

class TcpLink final : public Link {
  public:
    TcpLink(TimeSource& time, TcpSettings settings) : time_(time), settings_(std::move(settings)) {
        const bool v6 = settings_.host.find(':') != std::string::npos;
        traits_.name = "tcp:" + (v6 ? "[" + settings_.host + "]" : settings_.host) + ":" +
                       std::to_string(settings_.port);
        // A connection made anew cannot bring an answer to an old question.
        traits_.after_deadline = AfterDeadline::reconnect;
    }
    ~TcpLink() override { close(); }

    Task<void> open(TimePoint deadline) override {
        close();
        auto endpoints = co_await look_up(deadline);
        if (endpoints.has_error()) co_return endpoints.error();
        Fault last = unreachable(traits_.name, "the name has no address");
        for (const tcp::endpoint& endpoint : *endpoints) {
            auto connected = co_await connect(endpoint, deadline);
            if (connected.has_value()) co_return Result<void>{};
            last = connected.error();
            if (time_.now() >= deadline) break;
        }
        co_return last;
    }

    Task<std::size_t> read_some(std::span<std::byte> buffer) override {
        const auto socket = socket_;
        if (!socket) co_return unreachable(traits_.name, "the link is closed");
        const auto [failed, size] =
            co_await socket->async_read_some(asio::buffer(buffer.data(), buffer.size()), use_tuple);
        if (!failed) co_return size;
        co_return lost(socket, failed);
    }

    Task<void> write(Bytes bytes) override {
        const auto socket = socket_;
        if (!socket) co_return unreachable(traits_.name, "the link is closed");
        bool too_slow = false;
        const Alarm alarm(time_, time_.now() + write_patience, [socket, &too_slow] {
            too_slow = true;
            error_code ignored;
            socket->close(ignored);
        });
        const auto [failed, size] =
            co_await asio::async_write(*socket, asio::buffer(bytes), use_tuple);
        if (!failed) co_return Result<void>{};
        Fault fault = lost(socket, failed);
        if (too_slow) fault.what = traits_.name + ": the other side takes no bytes";
        co_return fault;
    }

    void close() noexcept override {
        if (!socket_) return;
        error_code ignored;
        socket_->close(ignored);
        socket_.reset();
    }

    bool is_open() const override { return socket_ != nullptr; }
    const LinkTraits& traits() const override { return traits_; }

  private:
    Task<std::vector<tcp::endpoint>> look_up(TimePoint deadline) {
        error_code failed;
        const auto address = asio::ip::make_address(settings_.host, failed);
        if (!failed) co_return std::vector{tcp::endpoint(address, settings_.port)};
        // The system's look-up cannot be interrupted: past the deadline it is left to end alone.
        const auto lookup = std::make_shared<Lookup>(time_.io());
        lookup->resolver.async_resolve(
            settings_.host, std::to_string(settings_.port),
            [lookup](const error_code& why, const tcp::resolver::results_type& results) {
                lookup->failed = why;
                for (const auto& entry : results) lookup->found.push_back(entry.endpoint());
                lookup->done.raise();
            });
        const Woke woke = co_await time_.wait(lookup->done, deadline);
        if (woke != Woke::signalled) {
            co_return unreachable(traits_.name, "the name was not resolved in time");
        }
        if (lookup->failed) {
            co_return unreachable(traits_.name, "name not resolved: " + lookup->failed.message(),
                                  "Check the host's name, or give its address.");
        }
        co_return lookup->found;
    }

    Task<void> connect(tcp::endpoint endpoint, TimePoint deadline) {
        const auto socket = std::make_shared<tcp::socket>(time_.io());
        bool too_late = false;
        const Alarm alarm(time_, deadline, [socket, &too_late] {
            too_late = true;
            error_code ignored;
            socket->close(ignored);
        });
        socket_ = socket;
        const auto [failed] = co_await socket->async_connect(endpoint, use_tuple);
        if (socket_ != socket) co_return unreachable(traits_.name, "closed while connecting");
        if (!failed && !too_late) {
            set_options(*socket);
            co_return Result<void>{};
        }
        close();
        if (too_late) co_return unreachable(traits_.name, "no connection within the deadline");
        co_return unreachable(traits_.name, failed.message(),
                              failed == asio::error::connection_refused
                                  ? "Nothing listens there: is the board's bridge running?"
                                  : "");
    }

    Fault lost(const std::shared_ptr<tcp::socket>& socket, const error_code& why) {
        if (socket_ == socket) close();
        if (why == asio::error::eof) return unreachable(traits_.name, "closed by the other side");
        if (why == asio::error::operation_aborted || why == asio::error::bad_descriptor) {
            return unreachable(traits_.name, "the link was closed");
        }
        return unreachable(traits_.name, why.message());
    }

    TimeSource& time_;
    TcpSettings settings_;
    LinkTraits traits_;
    std::shared_ptr<tcp::socket> socket_;
};

}  // namespace

std::unique_ptr<Link> make_tcp_link(TimeSource& time, TcpSettings settings) {
    return std::make_unique<TcpLink>(time, std::move(settings));
}

}  // namespace lanewright
