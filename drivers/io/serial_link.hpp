#pragma once
// Purpose:   a link over a serial port that this program opens and configures itself: raw 8N1,
//            any baud rate, held for this process alone, lowest latency the driver offers.
// Ownership: owns the file; refers to the TimeSource. The lock goes with the file.
// Threads:   io thread.
// The path is resolved at each open(): give the /dev/serial/by-id name, which stays with the
// adapter when the kernel numbers the ports anew.

#include <chrono>
#include <cstdint>
#include <memory>
#include <optional>
#include <string>

#include "drivers/io/link.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright {

struct SerialSettings {
    std::string path;
    std::uint32_t baud = 921600;
    std::chrono::nanoseconds settle{};       // quiet time after opening; then input is dropped
    std::optional<bool> dtr = {}, rts = {};  // idle level; absent: as the kernel leaves it
    bool hang_up_on_close = false;           // HUPCL: dropping DTR resets many boards
};

std::unique_ptr<Link> make_serial_link(TimeSource& time, SerialSettings settings);

}  // namespace lanewright
