#include <algorithm>
#include <boost/asio/as_tuple.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <boost/asio/write.hpp>
#include <charconv>

#include "sim_target/board/servers.hpp"

namespace lanewright::sim {

namespace {

namespace asio = boost::asio;
using asio::ip::tcp;
using boost::system::error_code;

constexpr auto use_tuple = asio::as_tuple(asio::use_awaitable);

class TcpEnd final : public WireEnd {
  public:
    TcpEnd(Hub& hub, tcp::socket socket) : WireEnd(hub, 0), socket_(std::move(socket)) {
        error_code ignored;
        socket_.set_option(tcp::no_delay(true), ignored);
    }

  private:
    asio::awaitable<std::size_t> read_bytes(std::span<std::uint8_t> buffer) override {
        const auto [failed, size] =
            co_await socket_.async_read_some(asio::buffer(buffer.data(), buffer.size()), use_tuple);
        co_return failed ? 0 : size;
    }

    asio::awaitable<bool> write_bytes(Octets bytes) override {
        const auto [failed, size] =
            co_await asio::async_write(socket_, asio::buffer(bytes), use_tuple);
        co_return !failed;
    }

    void shut() override {
        error_code ignored;
        socket_.close(ignored);
    }

    tcp::socket socket_;
};

tcp::endpoint endpoint_of(asio::io_context& io, const std::string& address) {
    const std::size_t colon = address.rfind(':');
    if (colon == std::string::npos) throw ServeError("--tcp " + address + ": expected HOST:PORT");
    std::string host = address.substr(0, colon);
    if (host.size() >= 2 && host.front() == '[' && host.back() == ']') {
        host = host.substr(1, host.size() - 2);
    }
    std::uint16_t port = 0;
    const char* end = address.data() + address.size();
    const auto [rest, wrong] = std::from_chars(address.data() + colon + 1, end, port);
    if (wrong != std::errc{} || rest != end || host.empty()) {
        throw ServeError("--tcp " + address + ": expected HOST:PORT, port from 0 to 65535");
    }
    error_code failed;
    const auto numeric = asio::ip::make_address(host, failed);
    if (!failed) return {numeric, port};
    tcp::resolver resolver(io);
    const auto found = resolver.resolve(host, std::to_string(port), failed);
    if (failed || found.empty()) throw ServeError("--tcp " + address + ": " + failed.message());
    return found.begin()->endpoint();
}

class TcpServer final : public Server {
  public:
    TcpServer(Hub& hub, const std::string& address)
        : hub_(hub), endpoint_(endpoint_of(hub.time.io(), address)), acceptor_(hub.time.io()) {
        error_code failed;
        listen(failed);
        if (failed) throw ServeError("--tcp " + address + ": " + failed.message());
        endpoint_ = acceptor_.local_endpoint(failed);
        hub_.cut.emplace_back([this] { cut(); });
    }

    std::string address() const override {
        const std::string host = endpoint_.address().to_string();
        return (endpoint_.address().is_v6() ? "[" + host + "]" : host) + ":" +
               std::to_string(endpoint_.port());
    }

    Task<void> run() override {
        hub_.tasks.spawn("tcp stop", close_at_stop());
        const Stop stop = hub_.tasks.stop_of_tasks();
        while (!stop.requested()) {
            co_await accept_clients();
            if (stop.requested()) break;
            // Cut, as a bridge that restarts: nothing listens until it is back.
            co_await hub_.time.sleep_until(hub_.time.now() + hub_.time_down(), stop);
            if (stop.requested()) break;
            error_code failed;
            listen(failed);
            if (failed) co_await hub_.time.sleep_until(hub_.time.now() + retry_after, stop);
        }
        cut();
        co_return Result<void>{};
    }

  private:
    static constexpr auto retry_after = std::chrono::milliseconds(50);

    void listen(error_code& failed) {
        acceptor_.open(endpoint_.protocol(), failed);
        if (!failed) acceptor_.set_option(asio::socket_base::reuse_address(true), failed);
        if (!failed) acceptor_.bind(endpoint_, failed);
        if (!failed) acceptor_.listen(asio::socket_base::max_listen_connections, failed);
        error_code ignored;
        if (failed) acceptor_.close(ignored);
    }

    asio::awaitable<void> accept_clients() {
        while (acceptor_.is_open()) {
            tcp::socket socket(hub_.time.io());
            const auto [failed] = co_await acceptor_.async_accept(socket, use_tuple);
            if (!acceptor_.is_open()) break;
            if (failed) {
                // Out of descriptors, say: it may pass.
                co_await hub_.time.sleep_until(hub_.time.now() + retry_after,
                                               hub_.tasks.stop_of_tasks());
                continue;
            }
            auto end = std::make_shared<TcpEnd>(hub_, std::move(socket));
            std::erase_if(ends_, [](const auto& weak) { return weak.expired(); });
            ends_.push_back(end);
            hub_.tasks.spawn("tcp client", WireEnd::run(end));
        }
    }

    Task<void> close_at_stop() {
        co_await hub_.time.sleep_until(TimePoint::max(), hub_.tasks.stop_of_tasks());
        cut();
        co_return Result<void>{};
    }

    void cut() {
        error_code ignored;
        acceptor_.close(ignored);
        for (const auto& weak : std::exchange(ends_, {})) {
            if (const auto end = weak.lock()) end->close();
        }
    }

    Hub& hub_;
    tcp::endpoint endpoint_;
    tcp::acceptor acceptor_;
    std::vector<std::weak_ptr<WireEnd>> ends_;
};

}  // namespace

std::unique_ptr<Server> make_tcp_server(Hub& hub, const std::string& address) {
    return std::make_unique<TcpServer>(hub, address);
}

}  // namespace lanewright::sim
