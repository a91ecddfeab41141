#include <boost/asio/as_tuple.hpp>
#include <boost/asio/ip/tcp.hpp>
#include <boost/asio/use_awaitable.hpp>
#include <boost/asio/write.hpp>
#include <catch2/catch.hpp>
#include <random>

#include "drivers/io/memory_link.hpp"
#include "drivers/io/task_group.hpp"
#include "drivers/io/tcp_link.hpp"

using namespace lanewright;
using namespace std::chrono_literals;
namespace asio = boost::asio;
using asio::ip::tcp;

namespace {

Bytes bytes_of(std::string_view text) {
    Bytes bytes;
    for (const char c : text) bytes.push_back(static_cast<std::byte>(c));
    return bytes;
}

std::string text_of(const Bytes& bytes) {
    std::string text;
    for (const std::byte b : bytes) text += static_cast<char>(b);
    return text;
}

Task<Bytes> read_exactly(Link& link, std::size_t size) {
    Bytes all;
    while (all.size() < size) {
        std::array<std::byte, 64> buffer;
        auto got = co_await link.read_some(buffer);
        if (got.has_error()) co_return got.error();
        all.insert(all.end(), buffer.begin(), buffer.begin() + static_cast<std::ptrdiff_t>(*got));
    }
    co_return all;
}

Task<void> open_and_send(TimeSource& time, Link& link, Bytes bytes) {
    auto opened = co_await link.open(time.now() + 1s);
    if (opened.has_error()) co_return opened.error();
    co_return co_await link.write(bytes);
}

Task<void> close_after(TimeSource& time, Link& link, std::chrono::nanoseconds span) {
    co_await time.sleep_until(time.now() + span);
    link.close();
    co_return Result<void>{};
}

Task<Bytes> echo_once(TimeSource& time, Link& link, Bytes bytes) {
    auto sent = co_await open_and_send(time, link, bytes);
    if (sent.has_error()) co_return sent.error();
    co_return co_await read_exactly(link, bytes.size());
}

// Serves one client: sends back what it got, then closes once it has sent `limit` bytes.
Task<void> echo_server(tcp::acceptor& acceptor, std::size_t limit) {
    tcp::socket socket(acceptor.get_executor());
    co_await acceptor.async_accept(socket, asio::as_tuple(asio::use_awaitable));
    std::size_t sent = 0;
    while (sent < limit) {
        std::array<char, 256> buffer;
        const auto [failed, size] = co_await socket.async_read_some(
            asio::buffer(buffer), asio::as_tuple(asio::use_awaitable));
        if (failed) break;
        co_await asio::async_write(socket, asio::buffer(buffer.data(), size),
                                   asio::as_tuple(asio::use_awaitable));
        sent += size;
    }
    co_return Result<void>{};
}

struct Pair {
    asio::io_context io;
    VirtualTimeSource time{io};
    MemoryPair pair;
    explicit Pair(MemoryOptions options = {}) : pair(make_memory_pair(time, std::move(options))) {}
};

}  // namespace

TEST_CASE("A memory link carries bytes both ways, late by its latency and its rate") {
    Pair bench({.latency = 3ms, .bytes_per_s = 1000});
    const TimePoint start = bench.time.now();
    REQUIRE(run_until_done(bench.time,
                           open_and_send(bench.time, *bench.pair.host, bytes_of("0123456789")))
                .has_value());
    const auto got = run_until_done(bench.time, read_exactly(*bench.pair.board, 10));
    CHECK(text_of(*got) == "0123456789");
    CHECK(bench.time.now() - start == 13ms);
    REQUIRE(run_until_done(bench.time, bench.pair.board->write(bytes_of("back"))).has_value());
    CHECK(text_of(*run_until_done(bench.time, read_exactly(*bench.pair.host, 4))) == "back");
}

TEST_CASE("A cut memory cable loses the link for a pending read, and open joins it anew") {
    Pair bench;
    REQUIRE(run_until_done(bench.time, open_and_send(bench.time, *bench.pair.host, Bytes{}))
                .has_value());
    const Alarm alarm(bench.time, bench.time.now() + 1s, [&] { bench.pair.cable->unplug(); });
    const auto lost = run_until_done(bench.time, read_exactly(*bench.pair.host, 1));
    REQUIRE(lost.has_error());
    CHECK(lost.error().cause == Cause::unreachable);
    CHECK_FALSE(bench.pair.host->is_open());
    CHECK(run_until_done(bench.time, bench.pair.host->open(bench.time.now() + 1s)).has_error());
    bench.pair.cable->plug_in();
    REQUIRE(run_until_done(bench.time, open_and_send(bench.time, *bench.pair.host, bytes_of("x")))
                .has_value());
    CHECK(text_of(*run_until_done(bench.time, read_exactly(*bench.pair.board, 1))) == "x");
}

TEST_CASE("A memory cable's hook may alter, double and delay what is written") {
    Pair bench;
    bench.pair.cable->on_host_writes([](Bytes bytes) {
        bytes.push_back(std::byte{'!'});
        return std::vector<MemoryPiece>{{bytes, 5ms}, {bytes, 2ms}, {bytes_of("a"), 0ms}};
    });
    REQUIRE(run_until_done(bench.time, open_and_send(bench.time, *bench.pair.host, bytes_of("b")))
                .has_value());
    CHECK(text_of(*run_until_done(bench.time, read_exactly(*bench.pair.board, 5))) == "ab!b!");
}

TEST_CASE("A TCP link carries bytes and reports the other side's closing as a lost link") {
    asio::io_context io;
    SteadyTimeSource time(io);
    tcp::acceptor acceptor(io, tcp::endpoint(asio::ip::make_address("127.0.0.1"), 0));
    TaskGroup group(io);
    group.spawn("echo", echo_server(acceptor, 5));
    auto link = make_tcp_link(time, {"localhost", acceptor.local_endpoint().port()});
    const auto echoed = run_until_done(time, echo_once(time, *link, bytes_of("hello")));
    REQUIRE(echoed.has_value());
    CHECK(text_of(*echoed) == "hello");
    const auto lost = run_until_done(time, read_exactly(*link, 1));
    REQUIRE(lost.has_error());
    CHECK(lost.error().cause == Cause::unreachable);
    CHECK(lost.error().what.find("closed by the other side") != std::string::npos);
    CHECK_FALSE(link->is_open());
    CHECK(run_until_done(time, link->write(bytes_of("x"))).error().cause == Cause::unreachable);
    CHECK(run_until_done(time, group.join()).has_value());
}

TEST_CASE("Closing a TCP link ends its pending read") {
    asio::io_context io;
    SteadyTimeSource time(io);
    tcp::acceptor acceptor(io, tcp::endpoint(asio::ip::make_address("127.0.0.1"), 0));
    auto link = make_tcp_link(time, {"127.0.0.1", acceptor.local_endpoint().port()});
    REQUIRE(run_until_done(time, open_and_send(time, *link, bytes_of("x"))).has_value());
    TaskGroup group(io);
    group.spawn("closer", close_after(time, *link, 10ms));
    const auto ended = run_until_done(time, read_exactly(*link, 1));
    CHECK(ended.error().cause == Cause::unreachable);
    CHECK(run_until_done(time, group.join()).has_value());
}

TEST_CASE("A refused TCP connection says so and what to look at") {
    asio::io_context io;
    SteadyTimeSource time(io);
    std::uint16_t port = 0;
    {
        tcp::acceptor acceptor(io, tcp::endpoint(asio::ip::make_address("127.0.0.1"), 0));
        port = acceptor.local_endpoint().port();
    }
    auto link = make_tcp_link(time, {"127.0.0.1", port});
    const auto opened = run_until_done(time, link->open(time.now() + 2s));
    REQUIRE(opened.has_error());
    CHECK(opened.error().cause == Cause::unreachable);
    CHECK(opened.error().text().find("Connection refused") != std::string::npos);
    CHECK(opened.error().hint.find("Nothing listens") != std::string::npos);
}

TEST_CASE("Connecting to a port whose queue is full ends at the deadline") {
    asio::io_context io;
    SteadyTimeSource time(io);
    // A listener that accepts nothing: once its queue is full, the kernel leaves requests open.
    tcp::acceptor acceptor(io, tcp::v4());
    acceptor.bind(tcp::endpoint(asio::ip::make_address("127.0.0.1"), 0));
    acceptor.listen(0);
    std::vector<std::unique_ptr<Link>> links;
    Result<void> opened;
    const TimePoint start = time.now();
    for (int i = 0; i < 8 && opened.has_value(); ++i) {
        links.push_back(make_tcp_link(time, {"127.0.0.1", acceptor.local_endpoint().port()}));
        opened = run_until_done(time, links.back()->open(time.now() + 200ms));
    }
    REQUIRE(opened.has_error());
    CHECK(opened.error().cause == Cause::unreachable);
    CHECK(opened.error().what.find("within the deadline") != std::string::npos);
    CHECK(time.now() - start < 3s);
}

TEST_CASE("A TCP write to a peer that reads nothing does not hang") {
    asio::io_context io;
    SteadyTimeSource time(io);
    tcp::acceptor acceptor(io, tcp::endpoint(asio::ip::make_address("127.0.0.1"), 0));
    auto link = make_tcp_link(time, {"127.0.0.1", acceptor.local_endpoint().port()});
    REQUIRE(run_until_done(time, open_and_send(time, *link, bytes_of("x"))).has_value());
    TaskGroup group(io);
    group.spawn("closer", close_after(time, *link, 100ms));
    const auto sent = run_until_done(time, link->write(Bytes(64'000'000)));
    CHECK(sent.error().cause == Cause::unreachable);
    CHECK(run_until_done(time, group.join()).has_value());
}
