#include "dialect_desk.hpp"

#include <stdexcept>

namespace lanewright::test {

std::vector<std::byte> bytes_of(const Octets& octets) {
    std::vector<std::byte> out;
    for (const std::uint8_t each : octets) out.push_back(static_cast<std::byte>(each));
    return out;
}

Octets octets_of(const std::vector<std::byte>& bytes) {
    Octets out;
    for (const std::byte each : bytes) out.push_back(static_cast<std::uint8_t>(each));
    return out;
}

std::vector<Octets> payloads_in(const std::vector<std::byte>& sent) {
    std::vector<Octets> out;
    Octets arriving;
    for (const std::uint8_t each : octets_of(sent)) {
        if (each != 0) {
            arriving.push_back(each);
            continue;
        }
        if (arriving.empty()) continue;
        const std::optional<Octets> payload = unframed_by_hand(arriving);
        if (!payload) throw std::runtime_error("a frame was sent that does not decode");
        out.push_back(*payload);
        arriving.clear();
    }
    if (!arriving.empty()) throw std::runtime_error("a frame was sent without its closing zero");
    return out;
}

Octets hello_answer(std::uint8_t try_number, std::uint32_t session, std::uint32_t boot,
                    bool resumed, std::uint32_t slots) {
    Octets out{0x81, try_number, 1};
    for (unsigned i = 0; i < 4; ++i) out.push_back(static_cast<std::uint8_t>(session >> (8 * i)));
    out.push_back(static_cast<std::uint8_t>(boot));  // below 128
    out.push_back(resumed ? 1 : 0);
    out.insert(out.end(), {0x80, 0x08});                                // 1024 bytes
    out.push_back(static_cast<std::uint8_t>(slots));                    // below 128
    out.insert(out.end(), {0x80, 0x02, 0x80, 0x8E, 0xCE, 0x1C, 4, 0});  // 256, 60 s, 4, 0
    return out;
}

Octets reply_to(const Octets& batch, const Octets& content) {
    Octets out{0x82};
    for (std::size_t i = 1; i < 7; ++i) out.push_back(batch.at(i));  // slot, boot below 128
    for (const std::uint8_t each : content) out.push_back(each);
    return out;
}

Octets error_to(const Octets& batch, std::uint32_t boot, std::uint8_t error) {
    Octets out{0x83};
    for (std::size_t i = 1; i < 6; ++i) out.push_back(batch.at(i));
    out.push_back(static_cast<std::uint8_t>(boot));
    out.push_back(error);
    return out;
}

namespace {

DialectOptions desk_options() {
    DialectOptions options;
    options.session = desk_session;
    options.answer_time = desk_answer_time;
    return options;
}

}  // namespace

Desk::Desk() : dialect(desk_options()), map(small_board()) {}

DialectStep Desk::hear(std::initializer_list<Octets> payloads) {
    std::vector<std::byte> received;
    for (const Octets& payload : payloads) {
        const std::vector<std::byte> frame = bytes_of(framed_by_hand(payload));
        received.insert(received.end(), frame.begin(), frame.end());
    }
    return dialect.step(received, now);
}

DialectStep Desk::tick(std::chrono::milliseconds time) {
    now += time;
    return dialect.step({}, now);
}

void Desk::greet() {
    dialect.link_reopened();
    const auto hello = payloads_in(tick().send).at(0);
    last_try = hello.at(1);
    hear({hello_answer(last_try, desk_session, 7, false)});
}

void Desk::admit() {
    dialect.admit(now);
}

DialectStep Desk::submit(std::uint64_t ticket, const Batch& batch, Urgency urgency) {
    dialect.submit(static_cast<Ticket>(ticket), batch, urgency);
    return tick();
}

Batch Desk::read_batch() const {
    Batch batch;
    if (!map.read(batch, Lane{0}, {"ID", "value"})) throw std::runtime_error("no ID");
    return batch;
}

Batch Desk::strobe_batch() const {
    Batch batch;
    if (!map.write_declared(batch, Lane{0}, {"LOAD", "strobe"}, 1)) {
        throw std::runtime_error("no strobe");
    }
    return batch;
}

}  // namespace lanewright::test
