#pragma once
// Purpose:   where wires come from: a listening TCP port, a pseudo-terminal with a link to it.
// Ownership: lives until the hub's tasks are joined; refers to the Hub.
// Threads:   io thread; construction opens and may throw std::system_error or ServeError.

#include <boost/asio/ip/tcp.hpp>
#include <memory>
#include <stdexcept>
#include <string>
#include <vector>

#include "sim_target/board/wire_end.hpp"

namespace lanewright::sim {

// What the user asked for cannot be had.
struct ServeError : std::runtime_error {
    using std::runtime_error::runtime_error;
};

class Server {
  public:
    virtual ~Server() = default;
    // Serves until the hub stops; then the port or link is gone.
    virtual Task<void> run() = 0;
    virtual std::string address() const = 0;  // 127.0.0.1:40123, or the link's path
};

// "HOST:PORT", with [..] around an IPv6 address; port 0: any that is free.
std::unique_ptr<Server> make_tcp_server(Hub& hub, const std::string& address);
// A pseudo-terminal and a symbolic link to it; a symbolic link that is there already is replaced.
std::unique_ptr<Server> make_pty_server(Hub& hub, const std::string& link);

}  // namespace lanewright::sim
