#include "drivers/dialects/framed_messages.hpp"

#include <type_traits>

#include "drivers/dialects/bytes.hpp"

namespace lanewright::framed {

namespace {

enum Kind : std::uint8_t {
    kind_hello = 0x01,
    kind_batch = 0x02,
    kind_hello_answer = 0x81,
    kind_reply = 0x82,
    kind_error_reply = 0x83
};

enum Code : std::uint8_t { code_read, code_write, code_write_check, code_wait, code_pause };

constexpr std::uint8_t address_next = 1u << 3, address_delta = 2u << 3, mask_follows = 1u << 5;

std::uint32_t all_bits(unsigned width_bits) {
    return width_bits >= 32 ? 0xFFFFFFFFu : (1u << width_bits) - 1u;
}

// Writes operations one behind the other; each address is told by its distance to the last.
class OperationWriter {
  public:
    explicit OperationWriter(std::vector<std::byte>& to) : to_(to) {}

    void operator()(const Read& read) { head(code_read, read.address, all_bits(32), 32); }

    void operator()(const Write& write) {
        head(write.read_back ? code_write_check : code_write, write.address, write.mask,
             write.width_bits);
        put_varint(to_, write.value);
    }

    void operator()(const WaitUntil& wait) {
        head(code_wait, wait.address, wait.mask, wait.width_bits);
        put_varint(to_, wait.value);
        put_varint(to_, static_cast<std::uint32_t>(wait.timeout.count()));
    }

    void operator()(const Pause& pause) {
        put_u8(to_, code_pause);
        put_varint(to_, static_cast<std::uint32_t>(pause.time.count()));
    }

  private:
    void head(std::uint8_t code, std::uint32_t address, std::uint32_t mask, unsigned width_bits) {
        const std::uint32_t distance = address - address_;
        if (distance == 1) code |= address_next;
        if (distance > 1) code |= address_delta;
        const bool whole = mask == all_bits(width_bits);
        if (!whole) code |= mask_follows;
        put_u8(to_, code);
        if (distance > 1) put_varint(to_, zigzag_of_difference(address_, address));
        if (!whole) put_varint(to_, mask);
        address_ = address;
    }

    std::vector<std::byte>& to_;
    std::uint32_t address_ = 0;
};

std::optional<BoardMessage> decode_hello_answer(ByteReader in) {
    HelloAnswer answer;
    answer.try_number = in.u8();
    answer.version = in.u8();
    answer.session = in.u32();
    if (!in.good()) return std::nullopt;
    if (answer.version != version) return answer;  // only the first fields are certain
    answer.boot = in.varint();
    const std::uint8_t resumed = in.u8();
    answer.resumed = resumed == 1;
    answer.largest_payload = in.varint();
    answer.slots = in.varint();
    answer.most_operations = in.varint();
    answer.longest_wait_us = in.varint();
    answer.sessions = in.varint();
    answer.bad_frames = in.varint();
    const bool sound = in.good() && resumed <= 1 && answer.boot != 0 &&
                       answer.largest_payload >= 64 && answer.slots >= 1 && answer.slots <= 128 &&
                       answer.most_operations >= 16 && answer.sessions >= 1;
    if (!sound) return std::nullopt;
    return answer;
}

Head decode_head(ByteReader& in) {
    Head head;
    head.slot = in.varint();
    head.count = in.u16();
    head.tag = in.u16();
    head.boot = in.varint();
    return head;
}

std::optional<Outcome> outcome_of(std::uint8_t code) {
    switch (code) {
        case 0:
            return Outcome::done;
        case 1:
            return Outcome::no_register;
        case 2:
            return Outcome::no_access;
        case 3:
            return Outcome::beyond_width;
        case 4:
            return Outcome::wait_expired;
        case 5:
            return Outcome::not_as_written;
        case 6:
            return Outcome::bus_error;
        default:
            return std::nullopt;
    }
}

unsigned width_of(const Operation& operation) {
    return std::visit(
        [](const auto& each) -> unsigned {
            if constexpr (std::is_same_v<std::decay_t<decltype(each)>, Pause>) {
                return 0;
            } else {
                return each.width_bits;
            }
        },
        operation);
}

// Whether the outcome can be that of the operation at all.
bool outcome_suits(Outcome outcome, const Operation& operation) {
    if (std::holds_alternative<Pause>(operation)) return false;
    if (outcome == Outcome::wait_expired) return std::holds_alternative<WaitUntil>(operation);
    if (outcome != Outcome::not_as_written) return true;
    const auto* write = std::get_if<Write>(&operation);
    return write != nullptr && write->read_back;
}

}  // namespace

std::vector<std::byte> encode(const Hello& hello) {
    std::vector<std::byte> out;
    put_u8(out, kind_hello);
    put_u8(out, hello.try_number);
    put_u8(out, version);
    put_u32(out, hello.session);
    return out;
}

std::vector<std::byte> encode(const Head& head, const Batch& batch) {
    std::vector<std::byte> out;
    put_u8(out, kind_batch);
    put_varint(out, head.slot);
    put_u16(out, head.count);
    put_u16(out, head.tag);
    put_varint(out, head.boot);
    OperationWriter writer(out);
    for (const Operation& operation : batch.operations()) std::visit(writer, operation);
    return out;
}

std::optional<BoardMessage> decode(std::span<const std::byte> payload) {
    ByteReader in(payload);
    const std::uint8_t kind = in.u8();
    if (kind == kind_hello_answer) return decode_hello_answer(in);
    if (kind != kind_reply && kind != kind_error_reply) return std::nullopt;
    const Head head = decode_head(in);
    if (!in.good() || in.at_end()) return std::nullopt;
    if (kind == kind_reply) {
        Reply reply{head, {}};
        while (!in.at_end()) reply.content.push_back(static_cast<std::byte>(in.u8()));
        return reply;
    }
    const std::uint8_t error = in.u8();
    if (error < 1 || error > 6 || !in.at_end()) return std::nullopt;
    return ErrorReply{head, static_cast<Error>(error)};
}

std::optional<BatchReply> decode_content(std::span<const std::byte> content, const Batch& batch) {
    ByteReader in(content);
    const auto operations = batch.operations();
    const std::optional<Outcome> outcome = outcome_of(in.u8());
    if (!outcome || !in.good()) return std::nullopt;
    BatchReply reply;
    reply.outcome = *outcome;
    reply.results.resize(operations.size());
    std::size_t with_results = operations.size();
    if (reply.outcome != Outcome::done) {
        reply.failed_at = in.varint();
        if (!in.good() || reply.failed_at >= operations.size()) return std::nullopt;
        if (!outcome_suits(reply.outcome, operations[reply.failed_at])) return std::nullopt;
        const bool own_result =
            reply.outcome == Outcome::wait_expired || reply.outcome == Outcome::not_as_written;
        with_results = reply.failed_at + (own_result ? 1 : 0);
    }
    for (std::size_t i = 0; i < with_results; ++i) {
        if (!has_result(operations[i])) continue;
        const std::uint32_t value = in.varint();
        if (value > all_bits(width_of(operations[i]))) return std::nullopt;
        reply.results[i] = value;
    }
    if (!in.good() || !in.at_end()) return std::nullopt;
    return reply;
}

std::size_t longest_reply(const Batch& batch) {
    constexpr std::size_t head_bytes = 20, result_bytes = 5;
    std::size_t bytes = head_bytes;
    for (const Operation& operation : batch.operations()) {
        if (has_result(operation)) bytes += result_bytes;
    }
    return bytes;
}

}  // namespace lanewright::framed
