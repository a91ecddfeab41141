#pragma once
// Purpose:   a link over TCP, as client. No delay, keepalive, end of file counts as lost.
// Ownership: owns its socket; refers to the TimeSource.
// Threads:   io thread.

#include <cstdint>
#include <memory>
#include <string>

#include "drivers/io/link.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright {

struct TcpSettings {
    std::string host;  // a name or a numeric address
    std::uint16_t port = 0;
};

std::unique_ptr<Link> make_tcp_link(TimeSource& time, TcpSettings settings);

}  // namespace lanewright
