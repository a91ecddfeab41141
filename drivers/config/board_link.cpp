#include <algorithm>
#include <charconv>
#include <cstdint>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

constexpr std::string_view link_forms = "tcp:HOST:PORT, tcp:[IPV6]:PORT or serial:PATH";

bool is_host(std::string_view host) {
    return !host.empty() && host.size() <= 255 && std::all_of(host.begin(), host.end(), [](char c) {
        return static_cast<unsigned char>(c) > ' ' && c != 0x7F && c != '[' && c != ']' && c != '/';
    });
}

std::optional<std::uint16_t> port_number(std::string_view text) {
    std::uint16_t port = 0;
    const char* const end = text.data() + text.size();
    const auto [stopped, error] = std::from_chars(text.data(), end, port);
    if (error != std::errc() || stopped != end || port == 0) return {};
    return port;
}

std::optional<LinkDescription> parse_tcp(std::string_view rest, std::string& why) {
    const std::size_t colon = rest.rfind(':');
    if (colon == std::string_view::npos) {
        why = "no port in \"tcp:" + std::string(rest) + "\", expected " + std::string(link_forms);
        return {};
    }
    std::string_view host = rest.substr(0, colon);
    const bool bracketed = host.size() > 2 && host.front() == '[' && host.back() == ']';
    if (bracketed) {
        host = host.substr(1, host.size() - 2);
    } else if (host.find(':') != std::string_view::npos) {
        why = "several colons in \"tcp:" + std::string(rest) +
              "\", expected an IPv6 address in brackets: tcp:[::1]:PORT";
        return {};
    }
    if (!is_host(host)) {
        why = "no host in \"tcp:" + std::string(rest) + "\", expected " + std::string(link_forms);
        return {};
    }
    const auto port = port_number(rest.substr(colon + 1));
    if (!port) {
        why = "port \"" + std::string(rest.substr(colon + 1)) + "\", expected 1 to 65535";
        return {};
    }
    return TcpLinkDescription{std::string(host), *port};
}

}  // namespace

std::optional<LinkDescription> parse_link(const std::string& text, const LinkDescription& base,
                                          std::string& why) {
    const std::string_view view = text;
    if (view.starts_with("tcp:")) return parse_tcp(view.substr(4), why);
    if (view.starts_with("serial:")) {
        SerialLinkDescription serial;
        if (const auto* given = std::get_if<SerialLinkDescription>(&base)) serial = *given;
        serial.path = text.substr(7);
        if (!serial.path.empty() && serial.path.find('\0') == std::string::npos) return serial;
        why = "no path in \"serial:\", expected serial:PATH";
        return {};
    }
    why = "link \"" + text + "\", expected " + std::string(link_forms);
    return {};
}

std::string text_of(const LinkDescription& link) {
    if (const auto* serial = std::get_if<SerialLinkDescription>(&link))
        return "serial:" + serial->path;
    const auto& tcp = std::get<TcpLinkDescription>(link);
    const bool bracketed = tcp.host.find(':') != std::string::npos;
    return "tcp:" + (bracketed ? "[" + tcp.host + "]" : tcp.host) + ":" + std::to_string(tcp.port);
}

LinkDescription decode_link(const Object& link) {
    if (link.word("kind", {"tcp", "serial"}) == 0) {
        TcpLinkDescription tcp;
        const Node host = link.need("host");
        tcp.host = host.text();
        if (host.is_text() && !is_host(tcp.host))
            host.complain(host.described(), "a host name or an address");
        tcp.port = static_cast<std::uint16_t>(link.integer("port", {1, 65535}));
        link.finish();
        return tcp;
    }
    SerialLinkDescription serial;
    const Node path = link.need("path");
    serial.path = path.text();
    if (path.is_text() && serial.path.empty())
        path.complain("an empty path", "the path of a serial device",
                      "the ones in /dev/serial/by-id stay the same when ports are renumbered");
    // The kernel takes any rate through termios2; the upper end is what USB bridges offer.
    serial.baud = static_cast<std::uint32_t>(link.integer_or("baud", serial.baud, {50, 20000000}));
    serial.settle_ms = link.number_or("settle_ms", 0, {.at_least = 0, .at_most = 60000});
    if (const auto dtr = link.find("dtr")) serial.dtr = dtr->boolean();
    if (const auto rts = link.find("rts")) serial.rts = rts->boolean();
    serial.hang_up_on_close = link.boolean_or("hang_up_on_close", false);
    link.finish();
    return serial;
}

}  // namespace lanewright
