#include "drivers/board/make_link.hpp"

#include <chrono>
#include <variant>

#include "drivers/io/serial_link.hpp"
#include "drivers/io/tcp_link.hpp"

namespace lanewright {

std::unique_ptr<Link> make_link(TimeSource& time, const LinkDescription& description) {
    if (const auto* tcp = std::get_if<TcpLinkDescription>(&description)) {
        return make_tcp_link(time, {.host = tcp->host, .port = tcp->port});
    }
    const auto& serial = std::get<SerialLinkDescription>(description);
    const std::chrono::duration<double, std::milli> settle(serial.settle_ms);
    return make_serial_link(time,
                            {.path = serial.path,
                             .baud = serial.baud,
                             .settle = std::chrono::duration_cast<std::chrono::nanoseconds>(settle),
                             .dtr = serial.dtr,
                             .rts = serial.rts,
                             .hang_up_on_close = serial.hang_up_on_close});
}

}  // namespace lanewright
