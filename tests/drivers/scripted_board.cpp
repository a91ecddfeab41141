#include "scripted_board.hpp"

#include <algorithm>

namespace lanewright::test {

namespace {

std::uint32_t crc_bit_by_bit(const Octets& data) {
    std::uint32_t crc = 0xFFFFFFFFu;
    for (const std::uint8_t each : data) {
        crc ^= each;
        for (int bit = 0; bit < 8; ++bit)
            crc = (crc & 1) != 0 ? (crc >> 1) ^ 0x82F63B78u : crc >> 1;
    }
    return ~crc;
}

void append_varint(Octets& to, std::uint32_t value) {
    for (; value > 127; value /= 128) to.push_back(static_cast<std::uint8_t>(128 + value % 128));
    to.push_back(static_cast<std::uint8_t>(value));
}

struct Cursor {
    const Octets& data;
    std::size_t at = 0;
    bool ok = true;

    std::uint32_t byte() {
        if (at < data.size()) return data[at++];
        ok = false;
        return 0;
    }
    std::uint32_t word(unsigned bytes) {
        std::uint32_t value = 0;
        for (unsigned i = 0; i < bytes; ++i) value += byte() << (8 * i);
        return value;
    }
    std::uint32_t varint() {
        std::uint64_t value = 0, weight = 1;
        for (int i = 0; i < 5; ++i, weight *= 128) {
            const std::uint32_t each = byte();
            value += weight * (each % 128);
            if (each < 128) break;
        }
        return static_cast<std::uint32_t>(value);
    }
};

bool has_own_result(unsigned code) {
    return code == 0 || code == 2 || code == 3;
}

}  // namespace

Octets framed_by_hand(const Octets& payload) {
    Octets body = payload;
    const std::uint32_t crc = crc_bit_by_bit(payload);
    for (unsigned i = 0; i < 4; ++i) body.push_back(static_cast<std::uint8_t>(crc >> (8 * i)));
    Octets out{0};
    std::size_t length_at = 0;
    for (const std::uint8_t each : body) {
        if (out.size() - length_at == 255) {  // the block is full
            out[length_at] = 255;
            length_at = out.size();
            out.push_back(0);
        }
        if (each != 0) {
            out.push_back(each);
        } else {
            out[length_at] = static_cast<std::uint8_t>(out.size() - length_at);
            length_at = out.size();
            out.push_back(0);
        }
    }
    out[length_at] = static_cast<std::uint8_t>(out.size() - length_at);
    out.push_back(0);
    return out;
}

std::optional<Octets> unframed_by_hand(const Octets& encoded) {
    Octets body;
    for (std::size_t at = 0; at < encoded.size();) {
        const std::size_t length = encoded[at];
        if (length == 0 || at + length > encoded.size()) return std::nullopt;
        for (std::size_t i = 1; i < length; ++i) body.push_back(encoded[at + i]);
        at += length;
        if (length < 255 && at < encoded.size()) body.push_back(0);
    }
    if (body.size() < 5) return std::nullopt;
    const Octets payload(body.begin(), body.end() - 4);
    const Octets tail(body.end() - 4, body.end());
    if (Cursor{tail}.word(4) != crc_bit_by_bit(payload)) return std::nullopt;
    return payload;
}

ScriptedBoard::ScriptedBoard(TimeSource& time, Link& link)
    : time_(time), link_(link), tasks_(time.io()) {}

void ScriptedBoard::start() {
    tasks_.spawn("scripted board", serve());
}

Task<void> ScriptedBoard::close() {
    tasks_.stop();
    link_.close();
    Result<void> ended = co_await tasks_.join();
    co_return Result<void>{};
}

void ScriptedBoard::reset() {
    ++boot;
    ++epoch_;
    sessions_.clear();
    session_ = 0;
    arriving_.clear();
}

Task<void> ScriptedBoard::serve() {
    std::vector<std::byte> buffer(512);
    while (!tasks_.stopping()) {
        Result<std::size_t> got = co_await link_.read_some(buffer);
        if (!got) {
            arriving_.clear();
            session_ = 0;
            // The end comes back by itself; a moment later is soon enough.
            const Woke woke = co_await time_.sleep_until(
                time_.now() + std::chrono::microseconds(100), tasks_.stop_of_tasks());
            if (woke == Woke::stopped) break;
            continue;
        }
        bytes_in += *got;
        for (std::size_t i = 0; i < *got; ++i) {
            const auto each = static_cast<std::uint8_t>(buffer[i]);
            if (each != 0) {
                arriving_.push_back(each);
                continue;
            }
            if (arriving_.empty()) continue;
            const std::optional<Octets> payload = unframed_by_hand(arriving_);
            arriving_.clear();
            if (payload) {
                take(*payload);
            } else {
                ++bad_frames;
            }
        }
    }
    co_return Result<void>{};
}

namespace {

// Sends in a task of its own, as a board's transmitter does.
Task<void> transmit(Link* link, Bytes bytes) {
    Result<void> written = co_await link->write(std::move(bytes));
    co_return Result<void>{};
}

}  // namespace

void ScriptedBoard::send(Octets payload) {
    if (silent) return;
    if (on_reply) on_reply(payload);
    if (payload.empty()) return;
    const Octets frame = framed_by_hand(payload);
    Bytes bytes;
    for (const std::uint8_t each : frame) bytes.push_back(static_cast<std::byte>(each));
    bytes_out += bytes.size();
    tasks_.spawn("transmit", transmit(&link_, std::move(bytes)));
}

void ScriptedBoard::say(const std::string& text) {
    Bytes bytes;
    for (const char each : text) bytes.push_back(static_cast<std::byte>(each));
    tasks_.spawn("say", transmit(&link_, std::move(bytes)));
}

void ScriptedBoard::take(const Octets& payload) {
    if (payload[0] == 1) take_hello(payload);
    if (payload[0] == 2) take_batch(payload);
}

void ScriptedBoard::take_hello(const Octets& payload) {
    Cursor in{payload, 1};
    const std::uint32_t try_number = in.byte();
    in.byte();
    const std::uint32_t session = in.word(4);
    ++hellos;
    if (forgets) sessions_.clear();
    Session& known = sessions_[session];
    if (known.slots.empty()) known.slots.resize(slots);
    session_ = session;
    Octets answer{0x81, static_cast<std::uint8_t>(try_number), 1};
    for (unsigned i = 0; i < 4; ++i)
        answer.push_back(static_cast<std::uint8_t>(session >> (8 * i)));
    append_varint(answer, boot);
    answer.push_back(known.used ? 1 : 0);
    for (const std::uint32_t limit : {largest_payload, slots, most_operations, 60000000u, 4u}) {
        append_varint(answer, limit);
    }
    append_varint(answer, static_cast<std::uint32_t>(bad_frames));
    send(answer);
}

void ScriptedBoard::refuse(const Head& head, std::uint8_t error) {
    Octets reply{0x83};
    append_varint(reply, head.slot);
    for (const std::uint16_t each : {head.count, head.tag}) {
        reply.push_back(static_cast<std::uint8_t>(each & 255));
        reply.push_back(static_cast<std::uint8_t>(each >> 8));
    }
    append_varint(reply, boot);
    reply.push_back(error);
    send(reply);
}

void ScriptedBoard::take_batch(const Octets& payload) {
    Cursor in{payload, 1};
    Head head;
    head.slot = in.varint();
    head.count = static_cast<std::uint16_t>(in.word(2));
    head.tag = static_cast<std::uint16_t>(in.word(2));
    head.boot = in.varint();
    if (head.boot != boot) return refuse(head, 1);
    if (session_ == 0 || head.tag != (session_ & 0xFFFF)) return refuse(head, 2);
    std::vector<Operation> operations;
    std::uint32_t address = 0;
    while (in.ok && in.at < payload.size()) {
        Operation each;
        const std::uint32_t code = in.byte();
        each.code = code & 7;
        if ((code & 0x18) == 0x08) address += 1;
        if ((code & 0x18) == 0x10) {
            const std::uint32_t zigzag = in.varint();
            address += (zigzag & 1) != 0 ? 0u - (zigzag / 2 + 1) : zigzag / 2;
        }
        each.address = address;
        if ((code & 0x20) != 0) each.mask = in.varint();
        if (each.code >= 1 && each.code <= 3) each.value = in.varint();
        if (each.code >= 3) each.time_us = in.varint();
        operations.push_back(each);
    }
    if (!in.ok) return refuse(head, 3);
    Session& session = sessions_[session_];
    if (head.slot >= session.slots.size()) return refuse(head, 4);
    Slot& slot = session.slots[head.slot];
    const std::uint16_t ahead = static_cast<std::uint16_t>(head.count - slot.count);
    if (ahead == 0 && slot.had) {
        ++repeats;
        if (!slot.running) send(slot.reply);
        return;
    }
    if (ahead == 0 || ahead > 32767) return refuse(head, 6);
    if (slot.running) return refuse(head, 5);
    slot.count = head.count;
    slot.had = slot.running = true;
    session.used = true;
    ++batches_begun;
    tasks_.spawn("batch", carry_out(session_, head, operations));
}

void ScriptedBoard::write(const Operation& operation) {
    std::uint32_t& reg = registers[operation.address];
    reg = (reg & ~operation.mask) | (operation.value & operation.mask);
    if (self_clearing.contains(operation.address)) reg = 0;
    const DoneWrite done{operation.address, operation.mask, operation.value};
    writes.push_back(done);
    if (on_write) on_write(done);
}

Task<bool> ScriptedBoard::wait_until(Operation operation, std::uint64_t epoch) {
    const TimePoint end = time_.now() + std::chrono::microseconds(operation.time_us);
    while ((registers[operation.address] & operation.mask) != operation.value) {
        if (time_.now() >= end || epoch != epoch_) co_return false;
        const TimePoint next = std::min(end, time_.now() + std::chrono::microseconds(200));
        const Woke woke = co_await time_.sleep_until(next, tasks_.stop_of_tasks());
        if (woke == Woke::stopped) co_return false;
    }
    co_return true;
}

Task<void> ScriptedBoard::carry_out(std::uint32_t session, Head head,
                                    std::vector<Operation> operations) {
    const std::uint64_t epoch = epoch_;
    Octets results;
    std::uint8_t outcome = 0;
    std::uint32_t failed_at = 0;
    for (std::size_t i = 0; i < operations.size() && outcome == 0; ++i) {
        const Operation each = operations[i];
        if (each.code == 4) {
            co_await time_.sleep_until(time_.now() + std::chrono::microseconds(each.time_us));
        } else if (!registers.contains(each.address)) {
            outcome = 1;
        } else if (each.code == 3) {
            Result<bool> met = co_await wait_until(each, epoch);
            if (!*met) outcome = 4;
        } else if (each.code != 0) {
            write(each);
        }
        if (epoch != epoch_) co_return Result<void>{};  // reset in mid-batch: no reply
        if (outcome == 0 && each.code == 2 && (registers[each.address] & each.mask) != each.value) {
            outcome = 5;
        }
        if (outcome != 0) failed_at = static_cast<std::uint32_t>(i);
        if (outcome != 1 && has_own_result(each.code)) {
            append_varint(results, registers[each.address] & (each.code == 0 ? ~0u : each.mask));
        }
    }
    Octets reply{0x82};
    append_varint(reply, head.slot);
    for (const std::uint16_t each : {head.count, head.tag}) {
        reply.push_back(static_cast<std::uint8_t>(each & 255));
        reply.push_back(static_cast<std::uint8_t>(each >> 8));
    }
    append_varint(reply, head.boot);
    reply.push_back(outcome);
    if (outcome != 0) append_varint(reply, failed_at);
    reply.insert(reply.end(), results.begin(), results.end());
    const auto known = sessions_.find(session);
    if (known == sessions_.end()) co_return Result<void>{};
    Slot& slot = known->second.slots[head.slot];
    slot.running = false;
    slot.reply = reply;
    if (session == session_) send(reply);
    co_return Result<void>{};
}

}  // namespace lanewright::test
