#include "sim_target/board/messages.hpp"

namespace lanewright::sim {

namespace {

constexpr std::uint32_t reply_head_size = 20;
constexpr std::uint32_t result_size = 5;

enum class Addressing : unsigned { same = 0, next = 1, delta = 2, malformed = 3 };

std::uint32_t unzigzag(std::uint32_t coded) {
    return (coded >> 1) ^ (0u - (coded & 1u));
}

// Reads one operation; `address` is the one before and becomes this one's.
std::optional<WireStep> decode_step(Reader& reader, std::uint32_t& address) {
    const auto code = reader.octet();
    if (!code || (*code & 0xC0u) != 0 || (*code & 7u) > 4) return std::nullopt;
    WireStep step;
    step.verb = static_cast<Verb>(*code & 7u);
    const auto addressing = static_cast<Addressing>((*code >> 3) & 3u);
    const bool masked = (*code & 0x20u) != 0;
    if (step.verb == Verb::pause) {
        const auto time = reader.varint();
        if (addressing != Addressing::same || masked || !time) return std::nullopt;
        step.time_us = *time;
        return step;
    }
    if (addressing == Addressing::malformed) return std::nullopt;
    if (addressing == Addressing::next) ++address;
    if (addressing == Addressing::delta) {
        const auto delta = reader.varint();
        if (!delta) return std::nullopt;
        address += unzigzag(*delta);
    }
    step.address = address;
    if (masked) {
        step.mask = reader.varint();
        if (!step.mask || *step.mask == 0 || step.verb == Verb::read) return std::nullopt;
    }
    if (step.verb == Verb::read) return step;
    const auto value = reader.varint();
    if (!value || (step.mask && (*value & ~*step.mask) != 0)) return std::nullopt;
    step.value = *value;
    if (step.verb == Verb::wait) {
        const auto time = reader.varint();
        if (!time) return std::nullopt;
        step.time_us = *time;
    }
    return step;
}

void write_head(Writer& writer, Kind kind, const BatchHead& head, std::uint32_t boot) {
    writer.octet(static_cast<unsigned>(kind));
    writer.varint(head.slot);
    writer.two(head.count);
    writer.two(head.tag);
    writer.varint(boot);
}

}  // namespace

std::optional<Hello> decode_hello(std::span<const std::uint8_t> payload) {
    Reader reader(payload);
    const auto kind = reader.octet(), attempt = reader.octet(), version = reader.octet();
    const auto session = reader.four();
    if (!kind || !attempt || !version || !session || *session == 0) return std::nullopt;
    return Hello{*attempt, *version, *session};
}

Octets encode(const HelloAnswer& answer) {
    Writer writer;
    writer.octet(static_cast<unsigned>(Kind::hello_answer));
    writer.octet(answer.hello.attempt);
    writer.octet(1);  // the one version there is, whatever the host speaks
    writer.four(answer.hello.session);
    writer.varint(answer.boot);
    writer.octet(answer.resumed ? 1 : 0);
    writer.varint(answer.limits.largest_payload);
    writer.varint(answer.limits.slots);
    writer.varint(answer.limits.most_operations);
    writer.varint(answer.limits.longest_wait_us);
    writer.varint(answer.limits.sessions);
    writer.varint(answer.bad_frames);
    return writer.take();
}

std::optional<BatchHead> decode_head(std::span<const std::uint8_t> payload,
                                     std::span<const std::uint8_t>& operations) {
    Reader reader(payload);
    reader.octet();
    const auto slot = reader.varint();
    const auto count = reader.two(), tag = reader.two();
    const auto boot = reader.varint();
    if (!slot || !count || !tag || !boot) return std::nullopt;
    operations = reader.rest();
    return BatchHead{*slot, *count, *tag, *boot};
}

BatchError decode_steps(std::span<const std::uint8_t> operations, const BoardLimits& limits,
                        std::vector<WireStep>& steps) {
    Reader reader(operations);
    std::uint32_t address = 0;
    std::uint64_t longest_reply = reply_head_size;
    bool beyond = false;
    while (!reader.at_end()) {
        const auto step = decode_step(reader, address);
        if (!step) return BatchError::malformed;
        if (step->has_result()) longest_reply += result_size;
        beyond = beyond || step->time_us > limits.longest_wait_us;
        steps.push_back(*step);
    }
    beyond =
        beyond || steps.size() > limits.most_operations || longest_reply > limits.largest_payload;
    return beyond ? BatchError::beyond_limit : BatchError::none;
}

Octets encode_error(const BatchHead& head, std::uint32_t boot, BatchError error) {
    Writer writer;
    write_head(writer, Kind::error_reply, head, boot);
    writer.octet(static_cast<unsigned>(error));
    return writer.take();
}

Octets encode_reply(const BatchHead& head, std::uint32_t boot, Outcome outcome,
                    std::uint32_t failed_at, std::span<const std::uint8_t> results) {
    Writer writer;
    write_head(writer, Kind::reply, head, boot);
    writer.octet(static_cast<unsigned>(outcome));
    if (outcome != Outcome::done) writer.varint(failed_at);
    writer.append(results);
    return writer.take();
}

}  // namespace lanewright::sim
